#include "capture/byte_window.h"

#include <algorithm>

#include "core/assert.h"

namespace kedge::capture {

namespace {
constexpr std::size_t fetch_bytes = 64U << 10U;
}

bool ByteWindow::have(std::size_t count) {
  if (end_ - begin_ >= count) return true;
  if (begin_ > 0) {
    std::copy(buffer_.begin() + static_cast<std::ptrdiff_t>(begin_),
              buffer_.begin() + static_cast<std::ptrdiff_t>(end_), buffer_.begin());
    end_ -= begin_;
    begin_ = 0;
  }
  while (end_ < count && !ended_) {
    if (buffer_.size() - end_ < fetch_bytes) buffer_.resize(end_ + fetch_bytes);
    const Result<std::size_t> got = source_->read(std::span(buffer_).subspan(end_));
    if (!got) failure_ = got.error();
    ended_ = !got || *got == 0;
    if (got) end_ += *got;
  }
  return end_ >= count;
}

void ByteWindow::drop(std::size_t count) {
  KEDGE_ASSERT(count <= end_ - begin_);
  begin_ += count;
  offset_ += count;
}

}  // namespace kedge::capture
