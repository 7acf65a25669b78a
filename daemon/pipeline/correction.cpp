#include "pipeline/correction.h"

#include <fmt/core.h>

#include <cmath>

namespace kedge::pipeline {

namespace {

struct Number {
  const char* field;
  bool present;
  double value;
  Bounds bounds;
  const char* unit;
};

Status check(const Number& number) {
  const auto& [field, present, value, bounds, unit] = number;
  if (!present || (value >= bounds.low && value <= bounds.high)) return {};
  const std::string wrong = std::isfinite(value) ? fmt::format("{}", value) : "not a finite number";
  return Error{fmt::format("correction.{} is {}; it must be {} to {} {}", field, wrong, bounds.low, bounds.high, unit)};
}

}  // namespace

Status check_correction(const station::v1::Correction& c) {
  if (c.tag().empty()) return Error{"correction.tag is missing: it names the tag"};
  for (const Number& number :
       {Number{"east_m", c.has_east_m(), c.east_m(), level_bounds_m, "m"},
        Number{"north_m", c.has_north_m(), c.north_m(), level_bounds_m, "m"},
        Number{"up_m", c.has_up_m(), c.up_m(), up_bounds_m, "m"},
        Number{"position_sigma_m", c.has_position_sigma_m(), c.position_sigma_m(), position_sigma_bounds_m, "m"},
        Number{"heading_deg", c.has_heading_deg(), c.heading_deg(), heading_bounds_deg, "deg"},
        Number{"heading_sigma_deg", c.has_heading_sigma_deg(), c.heading_sigma_deg(), heading_sigma_bounds_deg,
               "deg"}}) {
    if (Status status = check(number); !status) return status;
  }
  if (c.has_east_m() != c.has_north_m()) return Error{"correction.east_m and north_m go together: give both or none"};
  if (!c.has_east_m() && !c.has_heading_deg()) {
    return Error{"the correction says nothing: give east_m and north_m, or heading_deg, or both"};
  }
  if (c.has_up_m() && !c.has_east_m()) return Error{"correction.up_m needs east_m and north_m beside it"};
  if (c.has_position_sigma_m() && !c.has_east_m()) return Error{"correction.position_sigma_m needs a position"};
  if (c.has_heading_sigma_deg() && !c.has_heading_deg()) return Error{"correction.heading_sigma_deg needs heading_deg"};
  return {};
}

}  // namespace kedge::pipeline
