// What the system calls an error.
#pragma once

#include <string>
#include <system_error>

namespace kedge::io {

/// `error` as in errno.
[[nodiscard]] inline std::string system_text(int error) { return std::generic_category().message(error); }

}  // namespace kedge::io
