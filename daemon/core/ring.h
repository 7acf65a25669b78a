// A bounded history without allocation: the newest N values, oldest first.
#pragma once

#include <array>
#include <cstddef>

#include "core/assert.h"

namespace kedge {

template <class T, std::size_t N>
class Ring {
 public:
  static_assert(N > 0);

  [[nodiscard]] static constexpr std::size_t capacity() { return N; }
  [[nodiscard]] std::size_t size() const { return size_; }
  [[nodiscard]] bool empty() const { return size_ == 0; }
  [[nodiscard]] bool full() const { return size_ == N; }

  void clear() { first_ = size_ = 0; }

  /// Appends; the oldest value falls out of a full ring.
  void push_back(const T& value) {
    if (full()) pop_front();
    slots_[(first_ + size_) % N] = value;
    ++size_;
  }
  void pop_front() {
    KEDGE_ASSERT(size_ > 0);
    first_ = (first_ + 1) % N;
    --size_;
  }
  void pop_back() {
    KEDGE_ASSERT(size_ > 0);
    --size_;
  }

  /// Index 0 is the oldest.
  [[nodiscard]] T& operator[](std::size_t index) {
    KEDGE_ASSERT(index < size_);
    return slots_[(first_ + index) % N];
  }
  [[nodiscard]] const T& operator[](std::size_t index) const {
    KEDGE_ASSERT(index < size_);
    return slots_[(first_ + index) % N];
  }
  [[nodiscard]] T& front() { return (*this)[0]; }
  [[nodiscard]] const T& front() const { return (*this)[0]; }
  [[nodiscard]] T& back() { return (*this)[size_ - 1]; }
  [[nodiscard]] const T& back() const { return (*this)[size_ - 1]; }

  /// State visitor, see core/archive.h. Only what is held is written.
  template <class Archive>
  void fields(Archive& archive) {
    std::size_t count = size_;
    archive(count);
    if constexpr (Archive::loading) {
      clear();
      if (count > N) {
        archive.fail();
        return;
      }
      for (std::size_t i = 0; i < count && archive.ok(); ++i) {
        T value{};
        archive(value);
        push_back(value);
      }
    } else {
      for (std::size_t i = 0; i < count; ++i) archive((*this)[i]);
    }
  }

 private:
  std::array<T, N> slots_{};
  std::size_t first_ = 0;
  std::size_t size_ = 0;
};

}  // namespace kedge
