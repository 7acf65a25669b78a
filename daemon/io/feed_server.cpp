#include "io/feed_server.h"

#include <fmt/core.h>

#include <algorithm>
#include <asio/post.hpp>
#include <asio/steady_timer.hpp>
#include <set>
#include <utility>

#include "config/address.h"
#include "io/feed_session.h"
#include "io/listener.h"

namespace kedge::io {

namespace {

// Refused clients that may still be reading why; beyond this many they are just closed.
constexpr std::size_t refused_max = 16;

}  // namespace

class FeedServer::State final : public FeedSessions {
 public:
  State(asio::io_context& context, FeedServerOptions options, feed::Distributor& distributor, Log log)
      : options_(std::move(options)),
        distributor_(distributor),
        log_(std::move(log)),
        tcp_(context, [this](StreamSocket socket, const std::string& peer) { welcome(std::move(socket), peer); }),
        local_(context, [this](StreamSocket socket, const std::string& peer) { welcome(std::move(socket), peer); }),
        patience_(std::make_shared<asio::steady_timer>(context)) {}
  ~State() override {
    stop_listening();
    done_ = nullptr;
    end_all();
  }

  [[nodiscard]] Status open() {
    if (Status status = open_tcp(); !status) return status;
    if (options_.unix_path.empty()) return {};
    if (Status status = local_.open_local(options_.unix_path); !status) {
      tcp_.close();
      return Error{fmt::format("feed.unix: {}", status.error())};
    }
    return {};
  }

  void finish(std::chrono::milliseconds patience, std::function<void()> done) {
    stop_listening();
    done_ = std::move(done);
    for (const auto& session : std::set(sessions_)) session->finish();
    check_done();
    if (sessions_.empty()) return;
    patience_->expires_after(patience);
    patience_->async_wait([this, timer = std::weak_ptr(patience_)](const asio::error_code& error) {
      if (error || timer.expired()) return;
      end_all();
      check_done();
    });
  }

  [[nodiscard]] FeedCounters counters() const {
    FeedCounters counters = counters_;
    counters.clients = clients();
    counters.messages_lost = distributor_.messages_lost();
    return counters;
  }
  [[nodiscard]] std::uint16_t tcp_port() const { return tcp_.port(); }

 private:
  [[nodiscard]] Status open_tcp() {
    if (options_.tcp.empty()) return {};
    const Result<config::HostPort> where = config::parse_host_port(options_.tcp);
    if (!where) return Error{fmt::format("feed.tcp {}", where.error())};
    if (!options_.allow_remote && !config::is_loopback(where->host)) {
      return Error{
          fmt::format("feed.tcp: {} is reachable from other machines, and the feed is neither encrypted nor "
                      "authenticated; use 127.0.0.1 or [::1], or set feed.allow_remote",
                      where->host)};
    }
    if (Status status = tcp_.open_tcp(*where); !status) return Error{fmt::format("feed.tcp: {}", status.error())};
    return {};
  }

  void stop_listening() {
    tcp_.close();
    local_.close();
  }

  void welcome(StreamSocket socket, const std::string& peer) {
    ++counters_.accepted;
    if (sessions_.size() >= options_.clients_max + refused_max) {
      ++counters_.refused;
      return;
    }
    const bool full = clients() >= options_.clients_max;
    const auto session = std::make_shared<FeedSession>(*this, std::move(socket), peer,
                                                       FeedSession::Times{options_.subscribe_max, options_.stall_max});
    sessions_.insert(session);
    session->start();
    if (full)
      session->refuse(
          fmt::format("{} clients are connected, as many as are allowed (feed.clients_max)", options_.clients_max));
  }

  [[nodiscard]] std::size_t clients() const {
    return static_cast<std::size_t>(
        std::count_if(sessions_.begin(), sessions_.end(), [](const auto& session) { return !session->refused(); }));
  }

  void end_all() {
    for (const auto& session : std::exchange(sessions_, {})) session->end();
  }

  // Posted: whoever is told may destroy the server.
  void check_done() {
    if (!sessions_.empty() || !done_) return;
    patience_->cancel();
    asio::post(patience_->get_executor(), std::exchange(done_, nullptr));
  }

  // FeedSessions
  feed::Distributor& distributor() override { return distributor_; }
  void log(std::string_view line) override { log_(line); }
  void count_refused() override { ++counters_.refused; }
  void count_stalled() override { ++counters_.stalled; }
  void left(const std::shared_ptr<FeedSession>& session) override {
    sessions_.erase(session);
    check_done();
  }

  FeedServerOptions options_;
  feed::Distributor& distributor_;
  Log log_;
  FeedCounters counters_;
  std::set<std::shared_ptr<FeedSession>> sessions_;
  Listener tcp_;
  Listener local_;
  std::shared_ptr<asio::steady_timer> patience_;
  std::function<void()> done_;
};

FeedServer::FeedServer(asio::io_context& context, FeedServerOptions options, feed::Distributor& distributor, Log log)
    : state_(std::make_unique<State>(context, std::move(options), distributor, std::move(log))) {}
FeedServer::~FeedServer() = default;

Status FeedServer::open() { return state_->open(); }
void FeedServer::finish(std::chrono::milliseconds patience, std::function<void()> done) {
  state_->finish(patience, std::move(done));
}
FeedCounters FeedServer::counters() const { return state_->counters(); }
std::uint16_t FeedServer::tcp_port() const { return state_->tcp_port(); }

}  // namespace kedge::io
