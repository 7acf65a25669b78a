// What no sensor can mean: the check that a decoded packet passes before anything uses it.
//
// The bounds lie far outside what vehicles do, so that they catch wrong units, mixed-up bytes and
// numbers that are none, never a hard knock.
#pragma once

#include "core/result.h"
#include "wire/packet.h"

namespace kedge::wire {

/// Nothing to object to, or the first figure that cannot be: field, figure, bound, unit and the likely
/// cause.
[[nodiscard]] Status check_plausible(const Packet& packet);

}  // namespace kedge::wire
