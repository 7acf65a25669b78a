// Counts what the program asks of the heap, so that a test can see that the hot path asks for nothing. The counting
// operators stand in one source of the test program.
#pragma once

#include <atomic>

namespace kedge::test {

extern std::atomic<long> allocations;

}  // namespace kedge::test
