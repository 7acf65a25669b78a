#include "io/udp_link.h"

#include <fmt/core.h>
#include <netinet/in.h>
#include <sys/socket.h>

#include <array>
#include <asio/ip/udp.hpp>
#include <asio/ip/v6_only.hpp>
#include <asio/steady_timer.hpp>
#include <cerrno>
#include <cstring>
#include <utility>
#include <vector>

#include "io/backoff.h"
#include "io/monotonic.h"
#include "io/system_text.h"

namespace kedge::io {

namespace {

using asio::ip::udp;

constexpr std::size_t batch_datagrams = 16;
constexpr int batches_per_turn = 4;
// Asked for; the kernel gives what net.core.rmem_max allows.
constexpr int receive_buffer_bytes = 4 << 20;

// Room for the receive stamp, the drop counter and the destination address.
constexpr std::size_t control_bytes = CMSG_SPACE(sizeof(timespec)) + CMSG_SPACE(sizeof(std::uint32_t)) +
                                      CMSG_SPACE(sizeof(in6_pktinfo)) + CMSG_SPACE(sizeof(in_pktinfo));

// One recvmmsg call's worth of datagrams.
struct Batch {
  Batch() {
    for (std::size_t i = 0; i < batch_datagrams; ++i) {
      parts[i] = {bytes[i].data(), bytes[i].size()};
      msghdr& header = messages[i].msg_hdr;
      header.msg_iov = &parts[i];
      header.msg_iovlen = 1;
    }
  }

  // Returns how many, or -1 with errno.
  [[nodiscard]] int receive(int fd) {
    for (std::size_t i = 0; i < batch_datagrams; ++i) {
      msghdr& header = messages[i].msg_hdr;
      header.msg_name = &senders[i];
      header.msg_namelen = sizeof(senders[i]);
      header.msg_control = controls[i].data();
      header.msg_controllen = controls[i].size();
    }
    return ::recvmmsg(fd, messages.data(), batch_datagrams, MSG_DONTWAIT, nullptr);
  }

  std::array<std::array<std::byte, datagram_bytes_max + 1>, batch_datagrams> bytes;
  std::array<sockaddr_storage, batch_datagrams> senders;
  struct alignas(cmsghdr) Control : std::array<std::byte, control_bytes> {};
  std::array<Control, batch_datagrams> controls;
  std::array<iovec, batch_datagrams> parts{};
  std::array<mmsghdr, batch_datagrams> messages{};
};

// What the kernel says beside a datagram.
struct Notes {
  std::optional<TimeNs> stamp_utc_ns;
  std::optional<std::uint32_t> drops;  // since the socket was opened, modulo 2^32
  std::optional<in_addr> to_v4;
  std::optional<in6_addr> to_v6;
};

template <class T>
T read_control(cmsghdr* control) {
  T value{};
  std::memcpy(&value, CMSG_DATA(control), sizeof(T));
  return value;
}

Notes read_notes(msghdr& header) {
  Notes notes;
  for (cmsghdr* control = CMSG_FIRSTHDR(&header); control != nullptr; control = CMSG_NXTHDR(&header, control)) {
    if (control->cmsg_level == SOL_SOCKET && control->cmsg_type == SCM_TIMESTAMPNS) {
      const auto stamp = read_control<timespec>(control);
      notes.stamp_utc_ns = TimeNs{stamp.tv_sec} * ns_per_s + stamp.tv_nsec;
    } else if (control->cmsg_level == SOL_SOCKET && control->cmsg_type == SO_RXQ_OVFL) {
      notes.drops = read_control<std::uint32_t>(control);
    } else if (control->cmsg_level == IPPROTO_IP && control->cmsg_type == IP_PKTINFO) {
      notes.to_v4 = read_control<in_pktinfo>(control).ipi_addr;
    } else if (control->cmsg_level == IPPROTO_IPV6 && control->cmsg_type == IPV6_PKTINFO) {
      notes.to_v6 = read_control<in6_pktinfo>(control).ipi6_addr;
    }
  }
  return notes;
}

template <class Address>
capture::Endpoint endpoint(const Address& address, std::size_t skip, std::uint16_t port) {
  capture::Endpoint made;
  // `skip` leaves out the mapping prefix of an IPv4 address in an IPv6 one.
  std::memcpy(made.address.data(), reinterpret_cast<const unsigned char*>(&address) + skip, sizeof(Address) - skip);
  made.port = port;
  return made;
}

capture::UdpPath path_of(const sockaddr_storage& sender, const Notes& notes, std::uint16_t local_port) {
  capture::UdpPath path;
  if (sender.ss_family == AF_INET) {
    sockaddr_in from{};
    std::memcpy(&from, &sender, sizeof(from));
    path.family = capture::Family::v4;
    path.from = endpoint(from.sin_addr, 0, ntohs(from.sin_port));
    path.to = endpoint(notes.to_v4.value_or(in_addr{}), 0, local_port);
  } else {
    sockaddr_in6 from{};
    std::memcpy(&from, &sender, sizeof(from));
    const bool mapped = IN6_IS_ADDR_V4MAPPED(&from.sin6_addr);
    const std::size_t skip = mapped ? 12 : 0;
    path.family = mapped ? capture::Family::v4 : capture::Family::v6;
    path.from = endpoint(from.sin6_addr, skip, ntohs(from.sin6_port));
    path.to = endpoint(notes.to_v6.value_or(in6_addr{}), skip, local_port);
  }
  return path;
}

}  // namespace

class UdpLink::State : public std::enable_shared_from_this<State> {
 public:
  State(asio::io_context& context, UdpLinkOptions options, LinkEvents& events)
      : options_(std::move(options)),
        events_(events),
        socket_(context),
        timer_(context),
        batch_(std::make_unique<Batch>()) {}

  [[nodiscard]] Status open() {
    if (Status bound = bind(); !bound) return bound;
    closed_ = false;
    opened();
    return {};
  }

  void close() {
    closed_ = true;
    asio::error_code ignored;
    timer_.cancel(ignored);
    close_socket();
  }

  [[nodiscard]] const LinkCounters& counters() const { return counters_; }
  [[nodiscard]] std::uint16_t local_port() const { return socket_.is_open() ? local_port_ : std::uint16_t{0}; }

 private:
  [[nodiscard]] Status bind() {
    asio::error_code error;
    const asio::ip::address address = asio::ip::make_address(options_.address, error);
    const udp::endpoint endpoint(address, local_port_ != 0 ? local_port_ : options_.port);
    if (!error) socket_.open(endpoint.protocol(), error);
    if (!error && address.is_v6()) socket_.set_option(asio::ip::v6_only(!address.is_unspecified()), error);
    if (!error) socket_.non_blocking(true, error);
    if (!error) socket_.bind(endpoint, error);
    if (!error) local_port_ = socket_.local_endpoint(error).port();
    if (!error) error = ask_for_notes(address.is_v6());
    if (error) {
      close_socket();
      return Error{fmt::format("link {}: {} port {}/udp: {}{}", options_.name, options_.address, options_.port,
                               error.message(), remedy(error))};
    }
    return {};
  }

  static std::string_view remedy(const asio::error_code& error) {
    if (error == asio::error::address_in_use) return "; stop the other program or choose another port";
    if (error.value() == EADDRNOTAVAIL) return "; no interface of this station has this address";
    if (error == asio::error::access_denied) return "; ports below 1024 need a privilege, choose a higher one";
    if (error == asio::error::invalid_argument) return "; an address is given in numbers, such as 127.0.0.1 or ::1";
    return "";
  }

  // Only the receive buffer may be refused: a smaller one loses under load, and that is counted.
  [[nodiscard]] asio::error_code ask_for_notes(bool v6) {
    const int fd = socket_.native_handle();
    const int on = 1;
    ::setsockopt(fd, SOL_SOCKET, SO_RCVBUF, &receive_buffer_bytes, sizeof(receive_buffer_bytes));
    if (::setsockopt(fd, SOL_SOCKET, SO_TIMESTAMPNS, &on, sizeof(on)) != 0 ||
        ::setsockopt(fd, SOL_SOCKET, SO_RXQ_OVFL, &on, sizeof(on)) != 0 ||
        (v6 ? ::setsockopt(fd, IPPROTO_IPV6, IPV6_RECVPKTINFO, &on, sizeof(on))
            : ::setsockopt(fd, IPPROTO_IP, IP_PKTINFO, &on, sizeof(on))) != 0) {
      return {errno, asio::error::get_system_category()};
    }
    return {};
  }

  void opened() {
    ++counters_.openings;
    drops_seen_ = 0;
    stamps_ = ReceiveStamps(read_clocks());
    events_.state_changed(options_.source, true, "");
    if (!closed_) wait_for_datagrams();
  }

  void close_socket() {
    ++opening_;  // what still waits belongs to an opening that is over
    asio::error_code ignored;
    socket_.close(ignored);
  }

  void wait_for_datagrams() {
    socket_.async_wait(udp::socket::wait_read,
                       [self = shared_from_this(), opening = opening_](const asio::error_code& error) {
                         if (self->closed_ || opening != self->opening_) return;
                         if (error) {
                           self->fail(error.message());
                         } else {
                           self->read_turn();
                         }
                       });
  }

  void read_turn() {
    const std::uint64_t opening = opening_;
    for (int i = 0; i < batches_per_turn; ++i) {
      const int count = batch_->receive(socket_.native_handle());
      if (count < 0) {
        if (errno != EAGAIN && errno != EINTR) {
          fail(system_text(errno));
          return;
        }
        if (errno == EAGAIN) stamps_.emptied();
        break;
      }
      stamps_.read(read_clocks());
      for (std::size_t k = 0; k < static_cast<std::size_t>(count); ++k) {
        const Notes notes = read_notes(batch_->messages[k].msg_hdr);
        if (notes.drops) note_drops(*notes.drops);
        if (closed_) return;
        const std::size_t length = batch_->messages[k].msg_len;
        ++counters_.records;
        counters_.bytes += length;
        events_.received(options_.source, stamps_.arrival_ns(notes.stamp_utc_ns),
                         std::span(batch_->bytes[k]).first(length), path_of(batch_->senders[k], notes, local_port_));
        if (closed_ || opening != opening_) return;
      }
      if (static_cast<std::size_t>(count) < batch_datagrams) {
        stamps_.emptied();
        break;
      }
    }
    if (!closed_) wait_for_datagrams();
  }

  void note_drops(std::uint32_t drops) {
    const std::uint32_t lost = drops - std::exchange(drops_seen_, drops);
    if (lost == 0) return;
    counters_.dropped_by_kernel += lost;
    events_.shed(options_.source, lost, 0, "the socket's receive buffer was full");
  }

  void fail(const std::string& why) {
    close_socket();
    events_.state_changed(options_.source, false,
                          fmt::format("{} port {}/udp: {}", options_.address, local_port_, why));
    if (!closed_) retry_later();
  }

  void retry_later() {
    timer_.expires_after(backoff_.next());
    timer_.async_wait([self = shared_from_this()](const asio::error_code& error) {
      if (error || self->closed_) return;
      if (self->bind()) {
        self->backoff_.reset();
        self->opened();
      } else {
        self->retry_later();
      }
    });
  }

  UdpLinkOptions options_;
  LinkEvents& events_;
  udp::socket socket_;
  asio::steady_timer timer_;
  Backoff backoff_;
  LinkCounters counters_;
  std::unique_ptr<Batch> batch_;
  ReceiveStamps stamps_{ClockReading{}};
  std::uint64_t opening_ = 0;
  std::uint32_t drops_seen_ = 0;
  std::uint16_t local_port_ = 0;
  bool closed_ = true;
};

UdpLink::UdpLink(asio::io_context& context, UdpLinkOptions options, LinkEvents& events)
    : state_(std::make_shared<State>(context, std::move(options), events)) {}
UdpLink::~UdpLink() { close(); }

Status UdpLink::open() { return state_->open(); }
void UdpLink::close() { state_->close(); }
const LinkCounters& UdpLink::counters() const { return state_->counters(); }
std::uint16_t UdpLink::local_port() const { return state_->local_port(); }

}  // namespace kedge::io
