// From messages to samples: Position and Speed of the same tag and instant belong together.
#pragma once

#include <map>
#include <string>
#include <vector>

#include "proto/feed.pb.h"
#include "scoring/figures.h"

namespace kedge::scoring {

class Collector {
 public:
  void take(const feed::v1::Message& message);

  /// By tag, each in the order of the messages.
  [[nodiscard]] const std::map<std::string, std::vector<Sample>>& samples() const { return samples_; }

 private:
  void take_position(const feed::v1::Position& position);
  void take_speed(const feed::v1::Speed& speed);

  std::map<std::string, std::vector<Sample>> samples_;
};

}  // namespace kedge::scoring
