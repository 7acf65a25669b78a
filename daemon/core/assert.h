// Assertions for our own bugs. They stay on in release: a wrong state must stop before it becomes a
// wrong position. Nothing that came from outside may ever reach one.
#pragma once

#include <cstdio>
#include <cstdlib>

namespace kedge::detail {
[[noreturn]] inline void assertion_failed(const char* what, const char* file, int line) {
  std::fprintf(stderr, "%s:%d: internal error: %s\n", file, line, what);
  std::abort();
}
}  // namespace kedge::detail

// NOLINTNEXTLINE(cppcoreguidelines-macro-usage): needs the text and the place of the condition.
#define KEDGE_ASSERT(condition) \
  ((condition) ? static_cast<void>(0) : ::kedge::detail::assertion_failed(#condition, __FILE__, __LINE__))
