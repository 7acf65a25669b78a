// Refused packets in the log: by example, not by thousands.
#pragma once

#include <map>
#include <utility>

#include "core/time.h"
#include "pipeline/report.h"

namespace kedge::app {

class VerdictLog {
 public:
  /// Logs the first refusal of each kind from each device, then at most one in ten seconds with the number
  /// left out in between. Gated ranges are no news: health tells of them.
  void note(const pipeline::Verdict& verdict);

 private:
  struct Last {
    TimeNs logged_ns = 0;
    std::uint64_t left_out = 0;
  };
  /// Bounded: unknown devices beyond this many share one entry.
  static constexpr std::size_t entries_max = 256;
  std::map<std::pair<wire::DeviceId, pipeline::VerdictCode>, Last> last_;
};

}  // namespace kedge::app
