#include "app/live_runtime.h"

#include <fmt/chrono.h>
#include <spdlog/spdlog.h>

#include <algorithm>
#include <chrono>
#include <csignal>
#include <filesystem>

#include "app/processor.h"
#include "config/print.h"
#include "config/settings.h"
#include "core/build_info.h"
#include "io/serial_link.h"
#include "io/udp_link.h"

namespace kedge::app {
namespace {

/// How long clients may take what waits for them when the daemon ends.
constexpr std::chrono::milliseconds farewell{1000};

io::FeedServerOptions feed_options(const config::v1::Feed& feed) {
  io::FeedServerOptions options;
  options.tcp = feed.tcp();
  options.unix_path = feed.unix();
  options.allow_remote = feed.allow_remote();
  options.clients_max = feed.clients_max();
  return options;
}

feed::OutboxLimits outbox_limits(const config::v1::Feed& feed) {
  return {feed.queue_messages_max(), feed.queue_bytes_max()};
}

std::vector<capture::Link> capture_links(const pipeline::Settings& settings) {
  std::vector<capture::Link> links;
  links.reserve(settings.links.size());
  for (const pipeline::LinkSettings& link : settings.links) {
    links.push_back(
        {link.name, link.kind == pipeline::LinkKind::udp ? capture::LinkKind::udp : capture::LinkKind::serial});
  }
  return links;
}

/// Captures are named by the second they begin at; `turn` tells apart those of one second.
std::filesystem::path capture_path(const std::filesystem::path& folder, TimeNs utc_ns, int turn) {
  const auto begun = std::chrono::system_clock::time_point(std::chrono::seconds(utc_ns / ns_per_s));
  const std::string suffix = turn == 0 ? "" : fmt::format("-{}", turn);
  return folder / fmt::format("kedge-{:%Y%m%dT%H%M%SZ}{}.pcapng", fmt::gmtime(begun), suffix);
}

}  // namespace

LiveRuntime::LiveRuntime(const config::v1::Configuration& configuration, std::string stream_path)
    : configuration_(config::with_defaults(configuration)),
      stream_path_(std::move(stream_path)),
      signals_(context_, SIGINT, SIGTERM),
      flush_timer_(context_),
      conduit_(config::settings_from(configuration_), *this,
               [this](const pipeline::Verdict& verdict) { verdict_log_.note(verdict); }),
      distributor_(conduit_.settings(), std::string(version()), outbox_limits(configuration_.feed())),
      sequences_(conduit_.settings().links.size() + 1),
      ticker_(context_, conduit_.settings().limits.tick_ns, [this](const io::TickEvent& event) { tick(event); }),
      feed_server_(context_, feed_options(configuration_.feed()), distributor_,
                   [](std::string_view line) { spdlog::info("feed: {}", line); }),
      readiness_(context_) {}

LiveRuntime::~LiveRuntime() = default;

Status LiveRuntime::open() {
  if (!stream_path_.empty()) {
    if (Status opened = stream_file_.open(stream_path_); !opened) return opened;
  }
  if (Status opened = open_capture(); !opened) return opened;
  check_utc();
  if (Status opened = open_links(); !opened) return opened;
  if (Status opened = feed_server_.open(); !opened) return opened;
  if (!configuration_.control().unix().empty()) {
    control_.emplace(context_, configuration_.control().unix(),
                     [this](const station::v1::Correction& word) { return correct(word); });
    if (Status opened = control_->open(); !opened) return opened;
  }
  return {};
}

Status LiveRuntime::open_capture() {
  const std::filesystem::path folder = configuration_.capture().folder();
  if (folder.empty()) {
    spdlog::warn("nothing is captured: the configuration names no capture.folder");
    return {};
  }
  std::error_code failure;
  std::filesystem::create_directories(folder, failure);
  if (failure) return Error{fmt::format("capture folder {}: {}", folder.string(), failure.message())};
  const io::ClockReading clocks = io::read_clocks();
  std::filesystem::path path;
  Status created = Error{""};
  for (int turn = 0; !created && turn < 100; ++turn) {
    path = capture_path(folder, clocks.utc_ns, turn);
    if (turn > 0 && !std::filesystem::exists(capture_path(folder, clocks.utc_ns, turn - 1))) break;
    created = capture_file_.create(path);
  }
  if (!created) return created;
  capture::CaptureHead head;
  head.program = "kedged";
  head.version = std::string(version());
  head.build = build_identification();
  head.features = processor_features();
  head.configuration = config::print(configuration_);
  head.utc_minus_monotonic_ns = clocks.utc_minus_monotonic_ns();
  head.links = capture_links(conduit_.settings());
  Result<capture::CaptureWriter> writer = capture::CaptureWriter::begin(capture_file_, head);
  if (!writer) return Error{fmt::format("{}: {}", path.string(), writer.error())};
  capture_.emplace(std::move(*writer));
  spdlog::info("capture: {}", path.string());
  flush_capture();
  return {};
}

Status LiveRuntime::open_links() {
  io::LinkEvents& events = *this;
  for (int i = 0; i < configuration_.links_size(); ++i) {
    const config::v1::Link& link = configuration_.links(i);
    const auto source = static_cast<SourceId>(i + 1);
    if (link.has_udp()) {
      io::UdpLinkOptions options = {source, link.name(), link.udp().address(),
                                    static_cast<std::uint16_t>(link.udp().port())};
      links_.push_back(std::make_unique<io::UdpLink>(context_, std::move(options), events));
    } else {
      io::SerialLinkOptions options = {source, link.name(), link.serial().device(), link.serial().baud()};
      links_.push_back(std::make_unique<io::SerialLink>(context_, std::move(options), events));
    }
    if (Status opened = links_.back()->open(); !opened) return opened;
  }
  return {};
}

Status LiveRuntime::run() {
  signals_.async_wait([this](const std::error_code& failure, int signal) {
    if (!failure) stop(signal);
  });
  ticker_.start();
  const std::string status = fmt::format("site {}: {} tags, {} anchors", conduit_.settings().site.name,
                                         conduit_.settings().tags.size(), conduit_.settings().site.anchors.size());
  readiness_.ready(status);
  spdlog::info("ready: {}", status);
  context_.run();
  const Status captured = capture_ ? capture_file_.close() : Status{};
  const Status streamed = stream_path_.empty() ? Status{} : stream_file_.close();
  if (!captured && !streamed) return Error{captured.error() + "; " + streamed.error()};
  return captured ? streamed : captured;
}

void LiveRuntime::stop(int signal) {
  spdlog::info("ending on {}", signal == SIGINT ? "SIGINT" : "SIGTERM");
  readiness_.stopping();
  for (const std::unique_ptr<io::Link>& link : links_) link->close();
  ticker_.stop();
  control_.reset();
  flush_timer_.cancel();
  feed_server_.finish(farewell, [this] { context_.stop(); });
}

void LiveRuntime::received(SourceId source, TimeNs arrival_ns, std::span<const std::byte> bytes,
                           const capture::UdpPath& path) {
  accept({arrival_ns, source, sequences_[source]++, bytes}, path);
}

void LiveRuntime::state_changed(SourceId source, bool open, std::string_view reason) {
  const std::string& name = conduit_.settings().links[source - 1].name;
  if (open) {
    spdlog::info("link {}: open", name);
  } else {
    spdlog::warn("link {}: down: {}", name, reason);
  }
  station::v1::StationRecord record;
  record.mutable_link_state()->set_source(source);
  record.mutable_link_state()->set_open(open);
  record.mutable_link_state()->set_reason(std::string(reason));
  accept_station(record, io::now_monotonic());
}

void LiveRuntime::shed(SourceId source, std::uint64_t records, std::uint64_t bytes, std::string_view reason) {
  const TimeNs now_ns = io::now_monotonic();
  shed_unlogged_ += records;
  if (now_ns - shed_logged_ns_ > 10 * ns_per_s) {
    spdlog::warn("link {}: {} records lost: {}", conduit_.settings().links[source - 1].name, shed_unlogged_, reason);
    shed_logged_ns_ = now_ns;
    shed_unlogged_ = 0;
  }
  station::v1::StationRecord record;
  record.mutable_shed()->set_source(source);
  record.mutable_shed()->set_records(records);
  record.mutable_shed()->set_bytes(bytes);
  accept_station(record, now_ns);
}

void LiveRuntime::message(const feed::v1::Message& message) {
  if (!stream_path_.empty()) stream_file_.message(message);
  health_log_.note(message);
  distributor_.message(message);
}

Status LiveRuntime::correct(const station::v1::Correction& word) {
  const auto& tags = conduit_.settings().tags;
  if (std::none_of(tags.begin(), tags.end(), [&](const auto& tag) { return tag.model.name == word.tag(); })) {
    return Error{fmt::format("tag \"{}\" is not configured on this site", word.tag())};
  }
  spdlog::info("correction for tag {}: {}", word.tag(), word.ShortDebugString());
  station::v1::StationRecord record;
  *record.mutable_correction() = word;
  accept_station(record, io::now_monotonic());
  return {};
}

void LiveRuntime::tick(const io::TickEvent& event) {
  if (event.now_ns - utc_checked_ns_ >= ns_per_s) check_utc();
  if (capture_failing_ || capture_lost_ > 0) {
    const std::uint64_t told = capture_lost_;
    station::v1::StationRecord gap;
    gap.mutable_capture_gap()->set_records_lost(told);
    accept_station(gap, event.now_ns);
    // Written: the capture tells of them from here on. Not written: it is one more that is lost.
    if (capture_lost_ == told) capture_lost_ = 0;
  }
  station::v1::StationRecord tick;
  tick.mutable_tick();
  accept_station(tick, event.now_ns);
}

void LiveRuntime::check_utc() {
  utc_checked_ns_ = io::now_monotonic();
  const std::optional<io::UtcOffset> offset = utc_watch_.check();
  if (!offset) return;
  station::v1::StationRecord record;
  record.mutable_utc_offset()->set_utc_minus_monotonic_ns(offset->utc_minus_monotonic_ns);
  record.mutable_utc_offset()->set_synchronised(offset->synchronised);
  accept_station(record, utc_checked_ns_);
}

void LiveRuntime::flush_capture() {
  note_capture(capture_->flush());
  flush_timer_.expires_after(std::chrono::nanoseconds(from_seconds(configuration_.capture().flush_s())));
  flush_timer_.async_wait([this](const std::error_code& failure) {
    if (!failure) flush_capture();
  });
}

void LiveRuntime::accept(const RawRecord& record, const capture::UdpPath& path) {
  if (capture_) {
    const Status written = capture_->write({record, path});
    if (!written) {
      ++capture_lost_;
      note_capture(written);
    }
  }
  conduit_.accept(record);
}

void LiveRuntime::accept_station(const station::v1::StationRecord& record, TimeNs time_ns) {
  record.SerializeToString(&station_bytes_);
  accept({time_ns, station_source, sequences_[station_source]++, std::as_bytes(std::span(station_bytes_))}, {});
}

void LiveRuntime::note_capture(const Status& flushed) {
  if (flushed.ok() == !capture_failing_) return;
  capture_failing_ = !flushed.ok();
  if (capture_failing_) {
    spdlog::error("capture: {}; tracking goes on without it", flushed.error());
  } else {
    spdlog::info("capture: writing again");
  }
}

}  // namespace kedge::app
