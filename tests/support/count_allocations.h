// Counts what a test program allocates, so that a test can see that the hot path asks for no memory.
//
// Replaces the program's operator new: to be included by exactly one file of a program.
#pragma once

#include <cstddef>
#include <cstdlib>
#include <new>

#include "support/allocations.h"

void* operator new(std::size_t size) {
  ++kedge::test::allocations;
  if (void* memory = std::malloc(size)) return memory;
  throw std::bad_alloc();
}
void* operator new(std::size_t size, const std::nothrow_t&) noexcept {
  ++kedge::test::allocations;
  return std::malloc(size);
}
void operator delete(void* memory) noexcept { std::free(memory); }
void operator delete(void* memory, std::size_t) noexcept { std::free(memory); }
