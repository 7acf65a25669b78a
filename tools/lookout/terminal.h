// The terminal the board is drawn on. It is given back as it was.
#pragma once

#include <string_view>

#include "lookout/board.h"

namespace kedge::lookout {

class Terminal {
 public:
  /// Draws on standard output if it is a terminal and `wanted`.
  explicit Terminal(bool wanted);
  ~Terminal();
  Terminal(const Terminal&) = delete;
  Terminal& operator=(const Terminal&) = delete;

  [[nodiscard]] bool drawing() const { return drawing_; }
  /// NO_COLOR is not set.
  [[nodiscard]] bool colour() const { return colour_; }
  /// Asked anew each time, so that a resize is followed.
  [[nodiscard]] static Extent extent();

  /// Puts `screen` where the last one stood.
  void draw(std::string_view screen);

 private:
  bool drawing_;
  bool colour_;
};

/// Writes all of it to standard output; false if no one takes it any more.
bool put(std::string_view text);

}  // namespace kedge::lookout
