// Text of others on a terminal: nothing in it may steer the terminal, and it takes the room it should.
// A character is taken to be one column wide.
#pragma once

#include <cstddef>
#include <string>
#include <string_view>
#include <vector>

namespace kedge::lookout {

/// Control characters replaced by '?'; line feeds stay.
[[nodiscard]] std::string printable(std::string_view text);

/// Printable, cut to `columns`.
[[nodiscard]] std::string clipped(std::string_view text, std::size_t columns);

/// The same, filled with spaces.
[[nodiscard]] std::string padded(std::string_view text, std::size_t columns);

/// Printable, broken at spaces into lines of at most `columns`; a longer word is cut.
[[nodiscard]] std::vector<std::string> wrapped(std::string_view text, std::size_t columns);

}  // namespace kedge::lookout
