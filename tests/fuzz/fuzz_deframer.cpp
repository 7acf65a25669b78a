// Any bytes as a serial stream, cut into chunks anywhere: the same datagrams come out, every byte is
// accounted for, and a good frame behind a zero is always found.
#include <algorithm>
#include <cstdint>
#include <cstdlib>
#include <span>
#include <vector>

#include "wire/deframer.h"
#include "wire/encode.h"

using namespace kedge;
using Bytes = std::vector<std::byte>;

namespace {

void require(bool condition) {
  if (!condition) std::abort();
}

struct Collector {
  std::vector<Bytes> datagrams;
  void operator()(std::span<const std::byte> datagram) { datagrams.emplace_back(datagram.begin(), datagram.end()); }
};

}  // namespace

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  if (size == 0) return 0;
  const std::size_t chunk = 1 + data[0];
  const auto stream = std::as_bytes(std::span(data + 1, size - 1));

  wire::Deframer whole;
  Collector from_whole;
  whole.push(stream, from_whole);
  wire::Deframer chunked;
  Collector from_chunks;
  for (std::size_t at = 0; at < stream.size(); at += chunk) {
    chunked.push(stream.subspan(at, std::min(chunk, stream.size() - at)), from_chunks);
  }
  require(from_whole.datagrams == from_chunks.datagrams);
  require(whole.counters().bytes_dropped == chunked.counters().bytes_dropped);
  require(whole.counters().bytes_dropped <= stream.size());
  require(whole.counters().frames == from_whole.datagrams.size());

  Collector after;
  const Bytes datagram(stream.begin(), stream.begin() + static_cast<std::ptrdiff_t>(std::min<std::size_t>(
                                                            stream.size(), wire::datagram_bytes_max)));
  whole.push(Bytes{std::byte{0}}, after);
  after.datagrams.clear();
  whole.push(wire::frame(datagram), after);
  require(after.datagrams.size() == (datagram.empty() ? 0U : 1U));
  require(datagram.empty() || after.datagrams.front() == datagram);
#ifdef KEDGE_PLANTED_BUG
  // False for a stream with a frame that is no COBS and one whose check differs.
  require(whole.counters().malformed == 0 || whole.counters().crc_failures == 0);
#endif
  return 0;
}
