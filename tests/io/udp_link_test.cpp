// UDP over the real loopback interface.
#include <arpa/inet.h>
#include <netinet/in.h>
#include <sys/socket.h>
#include <unistd.h>

#include <algorithm>
#include <catch2/catch.hpp>
#include <cstring>
#include <thread>

#include "io/udp_link.h"
#include "support/link_events.h"
#include "support/loop.h"
#include "wire/limits.h"

using namespace kedge;
using namespace std::chrono_literals;

namespace {

// A device: the system's own socket calls.
class Sender {
 public:
  Sender(int family, std::uint16_t to_port) : fd_(::socket(family, SOCK_DGRAM, 0)) {
    sockaddr_in v4{};
    sockaddr_in6 v6{};
    v4.sin_family = AF_INET;
    v4.sin_addr.s_addr = htonl(INADDR_LOOPBACK);
    v4.sin_port = htons(to_port);
    v6.sin6_family = AF_INET6;
    v6.sin6_addr = in6addr_loopback;
    v6.sin6_port = htons(to_port);
    const bool is_v4 = family == AF_INET;
    const void* to = is_v4 ? static_cast<const void*>(&v4) : &v6;
    connected_ = ::connect(fd_, static_cast<const sockaddr*>(to), is_v4 ? sizeof(v4) : sizeof(v6)) == 0;
  }
  Sender(const Sender&) = delete;
  Sender& operator=(const Sender&) = delete;
  ~Sender() { ::close(fd_); }

  [[nodiscard]] bool send(const std::string& bytes) const {
    return connected_ && ::send(fd_, bytes.data(), bytes.size(), 0) == static_cast<ssize_t>(bytes.size());
  }
  [[nodiscard]] std::uint16_t port() const {
    sockaddr_in6 own{};
    socklen_t size = sizeof(own);
    ::getsockname(fd_, reinterpret_cast<sockaddr*>(&own), &size);
    return ntohs(own.sin6_port);  // at the same place in both families
  }

 private:
  int fd_;
  bool connected_ = false;
};

std::vector<std::uint8_t> loopback(capture::Family family) {
  if (family == capture::Family::v4) return {127, 0, 0, 1};
  return {0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 1};
}

void check_path(const capture::UdpPath& path, capture::Family family, std::uint16_t from, std::uint16_t to) {
  CHECK(path.family == family);
  const auto address = loopback(family);
  CHECK(std::equal(address.begin(), address.end(), path.from.address.begin()));
  CHECK(std::equal(address.begin(), address.end(), path.to.address.begin()));
  CHECK(path.from.port == from);
  CHECK(path.to.port == to);
}

}  // namespace

TEST_CASE("datagrams come in whole, in order, stamped by the kernel, with their path") {
  const auto [name, family, udp_family] =
      GENERATE(table<const char*, int, capture::Family>({{"127.0.0.1", AF_INET, capture::Family::v4},
                                                         {"::1", AF_INET6, capture::Family::v6},
                                                         {"0.0.0.0", AF_INET, capture::Family::v4},
                                                         {"::", AF_INET, capture::Family::v4},
                                                         {"::", AF_INET6, capture::Family::v6}}));
  CAPTURE(name, family);
  asio::io_context context;
  test::LinkEventLog events;
  io::UdpLink link(context, {.source = 3, .name = "yard", .address = name, .port = 0}, events);
  REQUIRE(link.open().ok());
  REQUIRE(events.states.size() == 1);
  CHECK(events.states[0].open);

  // The kernel begins to stamp a moment after it was first asked to; until then the stamp is of the reading.
  std::this_thread::sleep_for(50ms);
  const Sender sender(family, link.local_port());
  const std::string longest(io::datagram_bytes_max, 'x');
  const std::vector<std::string> sent = {"one", "", std::string("a\0b", 3), longest, "five"};
  const TimeNs before_ns = io::now_monotonic();
  for (const std::string& bytes : sent) REQUIRE(sender.send(bytes));
  const TimeNs after_ns = io::now_monotonic();
  // The stamp is of the arrival, not of the reading.
  std::this_thread::sleep_for(60ms);
  REQUIRE(test::run_until(context, [&] { return events.received_list.size() == sent.size(); }));

  TimeNs last_ns = 0;
  for (std::size_t i = 0; i < sent.size(); ++i) {
    CAPTURE(i);
    const auto& received = events.received_list[i];
    CHECK(received.source == 3);
    CHECK(received.bytes == sent[i]);
    // The two clocks are read at different instants; 1 ms is far above that.
    CHECK(received.arrival_ns > before_ns - ns_per_ms);
    CHECK(received.arrival_ns < after_ns + ns_per_ms);
    CHECK(received.arrival_ns >= last_ns);
    last_ns = received.arrival_ns;
    check_path(received.path, udp_family, sender.port(), link.local_port());
  }
  CHECK(link.counters().records == 5);
  CHECK(events.shed_records == 0);
}

TEST_CASE("a datagram beyond 2048 bytes is handed over cut to 2049, for the decoder to refuse, and hurts no other") {
  asio::io_context context;
  test::LinkEventLog events;
  io::UdpLink link(context, {.source = 1, .name = "yard"}, events);
  REQUIRE(link.open().ok());
  const Sender sender(AF_INET, link.local_port());
  REQUIRE(sender.send("before"));
  REQUIRE(sender.send(std::string(2049, 'x')));
  REQUIRE(sender.send(std::string(60000, 'y')));
  REQUIRE(sender.send("after"));
  REQUIRE(test::run_until(context, [&] { return events.received_list.size() == 4; }));
  CHECK(events.text() == "before" + std::string(2049, 'x') + std::string(2049, 'y') + "after");
  CHECK(events.shed_records == 0);
  CHECK(link.counters().records == 4);
  CHECK(link.counters().bytes == 6 + 2049 + 2049 + 5);
  // What the link cuts must be too long for the decoder.
  CHECK(io::datagram_bytes_max == wire::datagram_bytes_max);
}

TEST_CASE("what the kernel drops under a flood is counted to the last datagram") {
  asio::io_context context;
  test::LinkEventLog events;
  io::UdpLink link(context, {.source = 1, .name = "yard"}, events);
  REQUIRE(link.open().ok());
  const Sender sender(AF_INET, link.local_port());
  // More than any receive buffer that 4 MiB asked for can give.
  const std::uint64_t flood = 20000;
  for (std::uint64_t i = 0; i < flood; ++i) REQUIRE(sender.send(std::string(1000, 'f')));
  test::run_for(context, 300ms);
  CHECK(events.received_list.size() < flood);
  // The counter rides on the datagrams that come after the loss.
  REQUIRE(sender.send("last"));
  REQUIRE(test::run_until(
      context, [&] { return !events.received_list.empty() && events.received_list.back().bytes == "last"; }));
  CHECK(events.received_list.size() + events.shed_records == flood + 1);
  CHECK(link.counters().dropped_by_kernel == events.shed_records);
  CHECK(events.shed_reasons.front() == "the socket's receive buffer was full");
}

TEST_CASE("a flood on one link leaves time for another") {
  asio::io_context context;
  test::LinkEventLog events;
  io::UdpLink flooded(context, {.source = 1, .name = "flooded"}, events);
  io::UdpLink quiet(context, {.source = 2, .name = "quiet"}, events);
  REQUIRE(flooded.open().ok());
  REQUIRE(quiet.open().ok());
  const Sender flood(AF_INET, flooded.local_port());
  const Sender one(AF_INET, quiet.local_port());
  for (int i = 0; i < 150; ++i) REQUIRE(flood.send("f"));
  REQUIRE(one.send("q"));
  REQUIRE(test::run_until(context, [&] { return events.received_list.size() == 151; }));
  const auto place = std::find_if(events.received_list.begin(), events.received_list.end(),
                                  [](const auto& received) { return received.source == 2; }) -
                     events.received_list.begin();
  // After one turn of the flooded link at most.
  CHECK(place <= 64);
}

TEST_CASE("a UDP link that cannot bind says where, what and the remedy") {
  asio::io_context context;
  test::LinkEventLog events;
  io::UdpLink first(context, {.source = 1, .name = "yard"}, events);
  REQUIRE(first.open().ok());
  const std::uint16_t port = first.local_port();
  const auto error_of = [&](const char* address, std::uint16_t at) {
    io::UdpLink link(context, {.source = 2, .name = "gate", .address = address, .port = at}, events);
    const Status status = link.open();
    return status ? std::string("it opened") : status.error();
  };
  CHECK(error_of("127.0.0.1", port) ==
        fmt::format("link gate: 127.0.0.1 port {}/udp: Address already in use; stop the other "
                    "program or choose another port",
                    port));
  // TEST-NET-1 (RFC 5737) is no address of ours.
  CHECK(error_of("192.0.2.1", 4000) ==
        "link gate: 192.0.2.1 port 4000/udp: Cannot assign requested address; no interface of this station has this "
        "address");
  CHECK(
      error_of("gatehouse", 4000) ==
      "link gate: gatehouse port 4000/udp: Invalid argument; an address is given in numbers, such as 127.0.0.1 or ::1");
  CHECK(events.states.size() == 1);
}

TEST_CASE("a closed UDP link says nothing more, also from within its own event") {
  asio::io_context context;
  class Closing final : public io::LinkEvents {
   public:
    void received(SourceId, TimeNs, std::span<const std::byte>, const capture::UdpPath&) override {
      ++count;
      link->close();
    }
    void state_changed(SourceId, bool, std::string_view) override {}
    void shed(SourceId, std::uint64_t, std::uint64_t, std::string_view) override {}
    io::UdpLink* link = nullptr;
    int count = 0;
  } events;
  auto link = std::make_unique<io::UdpLink>(context, io::UdpLinkOptions{.source = 1, .name = "yard"}, events);
  events.link = link.get();
  REQUIRE(link->open().ok());
  const Sender sender(AF_INET, link->local_port());
  for (int i = 0; i < 5; ++i) REQUIRE(sender.send("x"));
  REQUIRE(test::run_until(context, [&] { return events.count > 0; }));
  CHECK(link->local_port() == 0);
  link.reset();
  test::run_for(context, 20ms);
  CHECK(events.count == 1);
}
