// Keeps everything a link says.
#pragma once

#include <string>
#include <vector>

#include "io/link.h"
#include "io/monotonic.h"

namespace kedge::test {

class LinkEventLog final : public io::LinkEvents {
 public:
  struct Received {
    SourceId source;
    TimeNs arrival_ns;
    std::string bytes;
    capture::UdpPath path;
  };
  struct State {
    bool open;
    std::string reason;
    TimeNs time_ns;
  };

  std::vector<Received> received_list;
  std::vector<State> states;
  std::uint64_t shed_records = 0;
  std::uint64_t shed_bytes = 0;
  std::vector<std::string> shed_reasons;

  [[nodiscard]] std::string text() const {
    std::string all;
    for (const Received& one : received_list) all += one.bytes;
    return all;
  }

  void received(SourceId source, TimeNs arrival_ns, std::span<const std::byte> bytes,
                const capture::UdpPath& path) override {
    received_list.push_back({source, arrival_ns, {reinterpret_cast<const char*>(bytes.data()), bytes.size()}, path});
  }
  void state_changed(SourceId, bool open, std::string_view reason) override {
    states.push_back({open, std::string(reason), io::now_monotonic()});
  }
  void shed(SourceId, std::uint64_t records, std::uint64_t bytes, std::string_view reason) override {
    shed_records += records;
    shed_bytes += bytes;
    shed_reasons.emplace_back(reason);
  }
};

}  // namespace kedge::test
