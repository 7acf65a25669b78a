#include "convert/log_folder.h"

#include <fmt/core.h>
#include <fmt/ranges.h>

#include <algorithm>
#include <charconv>
#include <limits>
#include <tuple>

namespace kedge::convert {

namespace {

// A row with a wrong time would make a station tick through years.
constexpr TimeNs gap_max_ns = 3600 * ns_per_s;

std::optional<std::uint32_t> number_of(std::string_view text) {
  std::uint32_t number = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), number);
  if (error != std::errc{} || end != text.data() + text.size()) return std::nullopt;
  return number;
}

std::vector<std::uint32_t> ids_of(const std::vector<AnchorRow>& anchors) {
  std::vector<std::uint32_t> ids;
  ids.reserve(anchors.size());
  for (const AnchorRow& anchor : anchors) ids.push_back(anchor.anchor_id);
  return ids;
}

}  // namespace

Result<LogFolder> LogFolder::read(const std::filesystem::path& path, const Options& options) {
  TagList list;
  auto ranges = RangeLog::read(path, list);
  if (!ranges) return Error{ranges.error()};
  LogFolder folder(*std::move(ranges));
  auto inertial = InertialLog::read(path, list);
  if (!inertial) return Error{inertial.error()};
  folder.inertial_ = *std::move(inertial);
  auto travel = TravelLog::read(path, list);
  if (!travel) return Error{travel.error()};
  folder.travel_ = *std::move(travel);
  auto anchors = read_anchors(path);
  if (!anchors) return Error{anchors.error()};
  folder.anchors_ = *std::move(anchors);

  if (Status status = folder.select_tags(list, options.tags); !status) return Error{status.error()};
  if (folder.inertial_) folder.add_events(folder.inertial_->log(), LogEvent::Kind::inertial);
  if (folder.travel_) folder.add_events(folder.travel_->log(), LogEvent::Kind::travel);
  if (Status status = folder.add_ranges(); !status) return Error{status.error()};
  if (Status status = folder.select_anchors(options.anchors); !status) return Error{status.error()};
  if (folder.events_.empty()) return Error{fmt::format("{}: no rows to convert", path.string())};
  std::stable_sort(folder.events_.begin(), folder.events_.end(), [](const LogEvent& a, const LogEvent& b) {
    return std::tie(a.time_ns, a.kind) < std::tie(b.time_ns, b.kind);
  });
  if (Status status = folder.check_gaps(); !status) return Error{status.error()};
  folder.begin_at_zero_or_later();
  return folder;
}

Status LogFolder::select_tags(const TagList& list, const std::vector<std::string>& wanted) {
  const std::vector<std::string>& names = list.names();
  for (const std::string& name : wanted) {
    if (std::find(names.begin(), names.end(), name) == names.end()) {
      return Error{fmt::format("--tags: no tag {} in the logs; there are {}", name, fmt::join(names, ", "))};
    }
  }
  // Numbers serve as device numbers as they are, if all can: a device number is never 0.
  const bool numbered =
      std::all_of(names.begin(), names.end(), [](const std::string& name) { return number_of(name).value_or(0) != 0; });
  for (const std::string& name : names) {
    selected_.emplace_back();
    if (!wanted.empty() && std::find(wanted.begin(), wanted.end(), name) == wanted.end()) continue;
    const std::optional<std::uint32_t> number = number_of(name);
    const auto place = static_cast<std::uint32_t>(selected_.size());
    selected_.back() = static_cast<std::uint32_t>(tags_.size());
    tags_.push_back({number ? "tag" + name : name, numbered ? *number : place});
  }
  return {};
}

Status LogFolder::select_anchors(const std::vector<std::uint32_t>& wanted) {
  if (wanted.empty()) return {};
  const std::vector<std::uint32_t> ids = ids_of(anchors_);
  for (const std::uint32_t id : wanted) {
    if (std::find(ids.begin(), ids.end(), id) == ids.end()) {
      return Error{fmt::format("--anchors: no anchor {} in anchors.csv; there are {}", id, fmt::join(ids, ", "))};
    }
  }
  const auto unwanted = [&](std::uint32_t id) { return std::find(wanted.begin(), wanted.end(), id) == wanted.end(); };
  std::erase_if(anchors_, [&](const AnchorRow& anchor) { return unwanted(anchor.anchor_id); });
  std::erase_if(events_, [&](const LogEvent& event) {
    return event.kind == LogEvent::Kind::range && unwanted(ranges_.anchor(event.row));
  });
  return {};
}

Status LogFolder::check_gaps() const {
  for (std::size_t i = 1; i < events_.size(); ++i) {
    const TimeNs gap_ns = events_[i].time_ns - events_[i - 1].time_ns;
    if (gap_ns <= gap_max_ns) continue;
    return Error{
        fmt::format("{}: column 't_s' is {:.6g} s after the row before it ({}); at most {} s are taken: split the log",
                    place(events_[i]), seconds(gap_ns), place(events_[i - 1]), gap_max_ns / ns_per_s)};
  }
  return {};
}

void LogFolder::begin_at_zero_or_later() {
  // Whole seconds, so that the times still read alike.
  const TimeNs first_ns = events_.front().time_ns;
  if (first_ns < 0) shift_s_ = (ns_per_s - 1 - first_ns) / ns_per_s;
  for (LogEvent& event : events_) event.time_ns += shift_s_ * ns_per_s;
}

Status LogFolder::add_ranges() {
  const std::vector<std::uint32_t> ids = ids_of(anchors_);
  for (std::size_t row = 0; row < ranges_.log().table.rows(); ++row) {
    if (std::find(ids.begin(), ids.end(), ranges_.anchor(row)) != ids.end()) continue;
    return Error{fmt::format("{}: anchor {} is not in anchors.csv; there are {}", ranges_.log().table.place(row),
                             ranges_.anchor(row), fmt::join(ids, ", "))};
  }
  add_events(ranges_.log(), LogEvent::Kind::range);
  return {};
}

void LogFolder::add_events(const LogTable& log, LogEvent::Kind kind) {
  for (std::size_t row = 0; row < log.times_ns.size(); ++row) {
    const LogEvent event = {log.times_ns[row], kind, 0, static_cast<std::uint32_t>(row)};
    if (!log.tags.empty()) {
      const auto& tag = selected_[log.tags[row]];
      if (tag) events_.push_back({event.time_ns, kind, *tag, event.row});
      continue;
    }
    // Several tags on one rig share its inertial unit and wheels: each gets a copy.
    for (std::uint32_t tag = 0; tag < tags_.size(); ++tag) events_.push_back({event.time_ns, kind, tag, event.row});
  }
}

packets::v1::Packet LogFolder::packet(const LogEvent& event) const {
  packets::v1::Packet packet;
  switch (event.kind) {
    case LogEvent::Kind::inertial:
      inertial_->fill(event.row, packet);
      break;
    case LogEvent::Kind::travel:
      travel_->fill(event.row, packet);
      break;
    case LogEvent::Kind::range:
      ranges_.fill(event.row, packet);
      break;
  }
  return packet;
}

std::string LogFolder::place(const LogEvent& event) const {
  switch (event.kind) {
    case LogEvent::Kind::inertial:
      return inertial_->log().table.place(event.row);
    case LogEvent::Kind::travel:
      return travel_->log().table.place(event.row);
    case LogEvent::Kind::range:
      return ranges_.log().table.place(event.row);
  }
  return {};
}

}  // namespace kedge::convert
