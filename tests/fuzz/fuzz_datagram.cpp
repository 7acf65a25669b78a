// Any bytes as a datagram: nothing crashes, and what passes the door is within the bounds it promises.
#include <cstdint>
#include <cstdlib>
#include <span>

#include "core/physics.h"
#include "wire/decode.h"
#include "wire/limits.h"
#include "wire/two_way.h"

using namespace kedge;

namespace {

void require(bool condition) {
  if (!condition) std::abort();
}

struct Judge : wire::PacketSink {
  std::size_t packets = 0;
  std::size_t refusals = 0;

  void packet(const wire::Packet& packet) override {
    ++packets;
    require(packet.device_id != 0);
    if (const auto* batch = std::get_if<wire::InertialBatch>(&packet.body)) {
      require(batch->count >= 1 && batch->count <= wire::samples_per_packet_max);
      for (std::size_t i = 0; i < batch->count; ++i) {
        require(batch->samples[i].specific_force_mps2.norm() <= 400.0);
        require(batch->samples[i].angular_rate_radps.norm() <= 70.0);
      }
    } else if (const auto* range = std::get_if<wire::Range>(&packet.body)) {
      require(range->tag_device_id != 0);
      require(range->range_m >= wire::range_m_min && range->range_m <= wire::range_m_max);
    }
  }
  void refused(const wire::Refusal& refusal) override {
    ++refusals;
    require(!refusal.text.empty());
  }
};

}  // namespace

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  static wire::Decoder decoder(propagation_speed_mps_default);
  Judge judge;
  decoder.decode(std::as_bytes(std::span(data, size)), judge);
  require(judge.packets <= wire::packets_per_datagram_max);
#ifdef KEDGE_PLANTED_BUG
  // False for a datagram with a good packet and a bad one.
  require(judge.packets == 0 || judge.refusals == 0);
#endif
  return 0;
}
