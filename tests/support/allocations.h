// What this test program has asked of the heap, where support/count_allocations.h is part of it.
#pragma once

#include <atomic>
#include <cstddef>

namespace kedge::test {
inline std::atomic<std::size_t> allocations{0};
}  // namespace kedge::test
