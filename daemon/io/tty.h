// A serial port in raw mode at any bit rate.
#pragma once

#include <cstdint>
#include <string>

#include "core/result.h"

namespace kedge::io {

/// Opens `device` for reading without blocking, for this program alone, raw, 8N1, and discards what waited in it (its
/// time of arrival is unknown). Returns the descriptor, which the caller owns. Rates that are not standard are asked
/// for as they are (Linux termios2); a rate the driver changed by more than 3 % is an error, and so is a port that
/// another program holds.
[[nodiscard]] Result<int> open_tty(const std::string& device, std::uint32_t baud);

}  // namespace kedge::io
