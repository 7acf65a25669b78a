// A serial line to the station: an existing device, or a pseudo-terminal made here.
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>
#include <string>

#include "core/result.h"

namespace kedge::simulate {

class SerialLine {
 public:
  SerialLine() = default;
  ~SerialLine();
  SerialLine(const SerialLine&) = delete;
  SerialLine& operator=(const SerialLine&) = delete;

  [[nodiscard]] Status open(const std::string& device);
  /// The station's end appears as the symbolic link `link`, which is removed at the end.
  [[nodiscard]] Status make_pty(const std::string& link);

  /// While nobody has the other end open, bytes are lost as on a cable; what does not fit as well.
  void send(std::span<const std::byte> frame);
  [[nodiscard]] std::uint64_t refused() const { return refused_; }

 private:
  int descriptor_ = -1;
  std::string link_;
  std::uint64_t refused_ = 0;
};

}  // namespace kedge::simulate
