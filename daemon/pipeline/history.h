// The bounded past of one tag: its measurements in order of their own time.
//
// Late measurements are put where they belong; the pipeline then goes back to a mark before them and
// applies what follows again. Ties are broken by acceptance order, so the order is total.
#pragma once

#include <compare>
#include <cstdint>
#include <memory>

#include "core/ring.h"
#include "core/time.h"
#include "fusion/measurement.h"
#include "wire/packet.h"

namespace kedge::pipeline {

/// Place of a measurement in the total order.
struct Key {
  TimeNs time_ns = 0;
  std::uint64_t accepted = 0;  ///< counts the measurements of this tag in acceptance order

  auto operator<=>(const Key&) const = default;

  template <class Archive>
  void fields(Archive& archive) {
    archive(time_ns, accepted);
  }
};

struct Entry {
  Key key;
  TimeNs arrival_ns = 0;
  wire::DeviceId device_id = 0;
  bool told = false;  ///< its verdict was published
  fusion::MeasurementBody body;

  template <class Archive>
  void fields(Archive& archive) {
    archive(key, arrival_ns, device_id, told);
    auto kind = static_cast<std::uint8_t>(body.index());
    archive(kind);
    if constexpr (Archive::loading) {
      switch (kind) {
        case 0:
          body.emplace<0>();
          break;
        case 1:
          body.emplace<1>();
          break;
        case 2:
          body.emplace<2>();
          break;
        case 3:
          body.emplace<3>();
          break;
        case 4:
          body.emplace<4>();
          break;
        default:
          archive.fail();
          return;
      }
    }
    std::visit([&](auto& measurement) { archive(measurement); }, body);
  }
};

class History {
 public:
  /// Two seconds of 200 Hz inertial samples and of sixteen anchors at 20 Hz fit with room to spare.
  static constexpr std::size_t capacity = 2048;

  History() : entries_(std::make_unique<Ring<Entry, capacity>>()) {}

  [[nodiscard]] bool empty() const { return entries_->empty(); }
  [[nodiscard]] bool full() const { return entries_->full(); }
  [[nodiscard]] std::size_t size() const { return entries_->size(); }
  [[nodiscard]] Entry& operator[](std::size_t index) { return (*entries_)[index]; }
  [[nodiscard]] const Entry& operator[](std::size_t index) const { return (*entries_)[index]; }
  void clear() { entries_->clear(); }
  void drop_oldest() { entries_->pop_front(); }

  /// Puts the entry in its place, from the newest end, where it nearly always belongs. Precondition: not full.
  void insert(const Entry& entry) {
    KEDGE_ASSERT(!full());
    entries_->push_back(entry);
    for (std::size_t i = entries_->size() - 1; i > 0 && (*entries_)[i].key < (*entries_)[i - 1].key; --i) {
      std::swap((*entries_)[i], (*entries_)[i - 1]);
    }
  }

  /// Index of the first entry after `key`.
  [[nodiscard]] std::size_t after(const Key& key) const {
    std::size_t low = 0;
    std::size_t high = entries_->size();
    while (low < high) {
      const std::size_t middle = (low + high) / 2;
      if ((*entries_)[middle].key <= key) {
        low = middle + 1;
      } else {
        high = middle;
      }
    }
    return low;
  }

  template <class Archive>
  void fields(Archive& archive) {
    archive(*entries_);
  }

 private:
  std::unique_ptr<Ring<Entry, capacity>> entries_;
};

}  // namespace kedge::pipeline
