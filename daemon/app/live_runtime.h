// The daemon at work: links, ticker, capture, engine and feed on one thread and one event loop.
//
// Every record is written down before it is used. If the disk refuses, tracking goes on and the station's
// health says so.
#pragma once

#include <asio/io_context.hpp>
#include <asio/signal_set.hpp>
#include <asio/steady_timer.hpp>
#include <cstdint>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "app/conduit.h"
#include "app/health_log.h"
#include "app/message_file.h"
#include "app/verdict_log.h"
#include "capture/capture_writer.h"
#include "capture/file_sink.h"
#include "feed/distributor.h"
#include "io/control_socket.h"
#include "io/feed_server.h"
#include "io/link.h"
#include "io/monotonic.h"
#include "io/readiness.h"
#include "io/ticker.h"
#include "proto/config.pb.h"
#include "proto/station.pb.h"

namespace kedge::app {

class LiveRuntime : private io::LinkEvents, private feed::MessageSink {
 public:
  /// `stream_path`: the canonical stream is also written there as JSON lines; empty: it is not.
  LiveRuntime(const config::v1::Configuration& configuration, std::string stream_path);
  ~LiveRuntime() override;

  /// Opens capture, links, feed and control socket, in this order; the first failure says what to do.
  [[nodiscard]] Status open();

  /// Runs until SIGINT or SIGTERM; then closes the links, lets clients take what waits for them, and
  /// completes the capture. Fails when something was lost on the way out.
  [[nodiscard]] Status run();

 private:
  // io::LinkEvents
  void received(SourceId source, TimeNs arrival_ns, std::span<const std::byte> bytes,
                const capture::UdpPath& path) override;
  void state_changed(SourceId source, bool open, std::string_view reason) override;
  void shed(SourceId source, std::uint64_t records, std::uint64_t bytes, std::string_view reason) override;
  // feed::MessageSink
  void message(const feed::v1::Message& message) override;

  [[nodiscard]] Status open_capture();
  [[nodiscard]] Status open_links();
  [[nodiscard]] Status correct(const station::v1::Correction& word);
  void tick(const io::TickEvent& event);
  void check_utc();
  void flush_capture();
  void stop(int signal);
  void accept(const RawRecord& record, const capture::UdpPath& path);
  void accept_station(const station::v1::StationRecord& record, TimeNs time_ns);
  void note_capture(const Status& flushed);

  const config::v1::Configuration configuration_;
  const std::string stream_path_;
  asio::io_context context_;
  asio::signal_set signals_;
  asio::steady_timer flush_timer_;

  MessageFile stream_file_;
  HealthLog health_log_;
  VerdictLog verdict_log_;
  Conduit conduit_;
  feed::Distributor distributor_;

  capture::FileSink capture_file_;
  std::optional<capture::CaptureWriter> capture_;
  std::uint64_t capture_lost_ = 0;  ///< records not written, of which the capture does not tell yet
  bool capture_failing_ = false;

  std::vector<std::unique_ptr<io::Link>> links_;
  std::vector<std::uint64_t> sequences_;  ///< next number of each source
  io::Ticker ticker_;
  io::FeedServer feed_server_;
  std::optional<io::ControlSocket> control_;
  io::Readiness readiness_;
  io::UtcWatch utc_watch_;
  TimeNs utc_checked_ns_ = 0;
  TimeNs shed_logged_ns_ = 0;
  std::uint64_t shed_unlogged_ = 0;
  std::string station_bytes_;  ///< reused
};

}  // namespace kedge::app
