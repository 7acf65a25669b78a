// What each number of the configuration may be, in one table: its range, its unit, and what its absence
// means. Checks, defaults and the printed effective configuration all read it here.
#pragma once

#include <google/protobuf/descriptor.h>

#include <optional>
#include <span>
#include <string_view>

namespace kedge::config {

struct Rule {
  enum class Absence {
    refused,  ///< it must be given
    meant,    ///< it says something: not known, not wanted, or depends on another field
    filled,   ///< the default stands for it
  };

  std::string_view field;  ///< "Message.field"
  std::string_view unit;   ///< empty for counts and shares
  double low = 0.0;
  double high = 0.0;  ///< included, like low
  Absence absence = Absence::meant;
  double standard = 0.0;  ///< the default, where the absence is filled
};

[[nodiscard]] std::span<const Rule> rules();

/// The rule of a field of type double or uint32, single or repeated.
[[nodiscard]] const Rule& rule_of(const google::protobuf::FieldDescriptor& field);

inline constexpr int anchors_max = 16;
inline constexpr int tags_max = 200;
inline constexpr int links_max = 16;
inline constexpr int places_max = 200;

/// Top speed of a profile where none is configured, m/s.
inline constexpr double ground_speed_max_mps = 3.0;
inline constexpr double free_speed_max_mps = 15.0;

}  // namespace kedge::config
