// Reads captures back, whole or damaged: what is returned is what was written, and what is lost is
// said, with its place and size.
#pragma once

#include <cstddef>
#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "capture/arrival.h"
#include "capture/block_reader.h"
#include "capture/byte_stream.h"
#include "capture/damage.h"
#include "core/result.h"

namespace kedge::capture {

enum class Next : std::uint8_t { record, damage, end };

/// Not thread-safe. Memory stays below a few MiB however long the file is and whatever it claims.
class CaptureReader {
 public:
  /// Reads the head. `source` must outlive the reader. Fails when this is no capture; the text says
  /// what it is instead and what can be read.
  static Result<CaptureReader> open(ByteSource& source);

  /// Empty texts where the section header was damaged (see head_intact). Links whose description was
  /// damaged have no name; their records are reported as damage.
  [[nodiscard]] const CaptureHead& head() const { return head_; }
  /// False: program, version, build, features and configuration are unknown.
  [[nodiscard]] bool head_intact() const { return head_intact_; }

  /// The next record in the order of the file; its bytes stay valid until the next call. After
  /// Next::damage, damage() tells it, and reading goes on behind it.
  Next next(Arrival& arrival);
  /// Precondition: next() has returned Next::damage last.
  [[nodiscard]] const Damage& damage() const { return damage_; }

 private:
  struct Interface {
    Link link;
    TimeNs utc_minus_monotonic_ns = 0;
  };

  explicit CaptureReader(ByteSource& source) : blocks_(source) {}

  Status read_head();
  Status take_section(const Block& block);
  Status take_interface(const Block& block);
  Status take_packet(const Block& block, Arrival& arrival);
  Next damaged(Damage damage);

  BlockReader blocks_;
  CaptureHead head_;
  bool head_intact_ = false;
  std::vector<std::optional<Interface>> interfaces_;  // by source
  std::optional<Block> ahead_;                        // read by open(), for the first next()
  std::vector<Damage> pending_;                       // found by open(), oldest first
  std::size_t told_ = 0;
  Damage damage_;
};

}  // namespace kedge::capture
