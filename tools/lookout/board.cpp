#include "lookout/board.h"

#include <fmt/chrono.h>
#include <fmt/core.h>
#include <google/protobuf/util/json_util.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <string_view>
#include <vector>

#include "io/json_line.h"
#include "lookout/text_width.h"

namespace kedge::lookout {

namespace {

using feed::v1::Standing;

// A shape for each standing, for those who do not see the colours: what is around says how the place is
// bounded (ring, two sides, closed), what is inside whether ranges hold it.
struct Look {
  std::string_view shape;
  std::string_view colour;
};

Look look(Standing::Value standing) {
  switch (standing) {
    case Standing::waking:
      return {" :: ", "\x1b[36m"};
    case Standing::ring:
      return {"(  )", "\x1b[35m"};
    case Standing::twofold:
      return {"<  >", "\x1b[33m"};
    case Standing::loose:
      return {"[  ]", "\x1b[36m"};
    case Standing::settled:
      return {"[##]", "\x1b[32m"};
    case Standing::coasting:
      return {"[~~]", "\x1b[33m"};
    case Standing::lost:
      return {"?  ?", "\x1b[31m"};
    default:
      return {" .. ", "\x1b[2m"};
  }
}

constexpr std::string_view plain = "\x1b[0m";

// A number in a fixed width, or a dash where it is not known.
std::string figure(bool known, double value, int width, int decimals) {
  return known && std::isfinite(value) ? fmt::format("{:>{}.{}f}", value, width, decimals)
                                       : fmt::format("{:>{}}", "-", width);
}

std::string concerns_text(const feed::v1::Health& health) {
  std::string text;
  for (const feed::v1::Concern& concern : health.concerns()) {
    text += fmt::format("{}{} {:.3g}", text.empty() ? "" : ", ", feed::v1::Concern::Value_Name(concern.concern()),
                        concern.figure());
  }
  return text;
}

Standing::Value standing_of(const std::optional<feed::v1::Position>& position,
                            const std::optional<feed::v1::Health>& health) {
  if (position) return position->standing();
  return health ? health->tag_health().standing() : Standing::silent;
}

std::string cells(std::string_view name, std::string_view standing, std::string_view place, std::string_view motion,
                  std::string_view rates, std::string_view concerns) {
  std::string text =
      fmt::format("{} {:13} {:>30} {:>12} {:>20}  {}", padded(name, 12), standing, place, motion, rates, concerns);
  text.erase(text.find_last_not_of(' ') + 1);
  return text;
}

std::string column_heads() {
  return cells("tag", "standing", fmt::format("{:>8} {:>8} {:>5} {:>6}", "east m", "north m", "up", "95 %"),
               fmt::format("{:>6} {:>5}", "m/s", "deg"), fmt::format("{:>6} {:>5} {:>6}", "age s", "range", "inert."),
               "concerns");
}

}  // namespace

void Board::take(const feed::v1::Message& message, TimeNs now_ns) {
  if (first_ns_ == 0) first_ns_ = now_ns;
  ++messages_;
  const bool of_the_stream = message.sequence() > greeting_.after_sequence();
  switch (message.body_case()) {
    case feed::v1::Message::kGreeting:
      greeting_ = message.greeting();
      for (const std::string& name : greeting_.tags()) tags_[name];
      break;
    case feed::v1::Message::kGap:
      messages_lost_ += message.gap().messages_lost();
      break;
    case feed::v1::Message::kPulse:
      last_utc_ns_ = message.pulse().utc_ns();
      break;
    case feed::v1::Message::kPosition: {
      Tag& tag = tags_[message.position().tag()];
      ++tag.messages;
      tag.position = message.position();
      last_utc_ns_ = message.position().utc_ns();
      if (of_the_stream) {
        tag.worst_latency_ns = std::max(tag.worst_latency_ns.value_or(0), now_ns - message.position().time_ns());
      }
      break;
    }
    case feed::v1::Message::kSpeed: {
      Tag& tag = tags_[message.speed().tag()];
      ++tag.messages;
      tag.speed = message.speed();
      break;
    }
    case feed::v1::Message::kHealth: {
      const feed::v1::Health& health = message.health();
      if (health.has_tag()) {
        Tag& tag = tags_[health.tag()];
        ++tag.messages;
        tag.health = health;
        tag.health_received_ns = now_ns;
      } else if (health.has_anchor()) {
        anchors_[health.anchor()] = health;
      } else {
        station_ = health;
      }
      break;
    }
    default:
      break;  // of a newer station
  }
}

bool Board::complete() const {
  return !tags_.empty() && std::all_of(tags_.begin(), tags_.end(),
                                       [](const auto& entry) { return entry.second.position && entry.second.health; });
}

std::string Board::head(TimeNs now_ns) const {
  const double running_s = std::max(seconds(now_ns - first_ns_), 1e-3);
  std::string text = fmt::format("{}   {:%H:%M:%S} UTC   {:.0f} messages/s", greeting_.site(),
                                 fmt::gmtime(static_cast<std::time_t>(last_utc_ns_ / ns_per_s)),
                                 static_cast<double>(messages_) / running_s);
  if (messages_lost_ > 0) text += fmt::format("   {} lost", messages_lost_);
  if (station_) {
    const feed::v1::StationHealth& health = station_->station_health();
    text += fmt::format("   links {}/{}", health.links_open(), health.links());
    if (const std::string concerns = concerns_text(*station_); !concerns.empty())
      text += fmt::format("   {}", concerns);
  }
  return text;
}

std::string Board::row(const std::string& name, const Tag& tag, TimeNs now_ns) {
  std::string place;
  if (tag.position && tag.position->has_east_m()) {
    const feed::v1::Position& p = *tag.position;
    place = fmt::format("{} {} {} {}", figure(true, p.east_m(), 8, 2), figure(true, p.north_m(), 8, 2),
                        figure(p.has_up_m(), p.up_m(), 5, 1), figure(p.has_radius_95_m(), p.radius_95_m(), 6, 2));
  } else if (tag.position && tag.position->has_ring_radius_m()) {
    place = fmt::format("{:.2f} from {}", tag.position->ring_radius_m(), tag.position->ring_anchor());
  }
  std::string motion;
  if (tag.speed) {
    motion = fmt::format("{} {}", figure(tag.speed->has_speed_mps(), tag.speed->speed_mps(), 6, 2),
                         figure(tag.speed->has_course_deg(), tag.speed->course_deg(), 5, 0));
  }
  std::string rates;
  std::string concerns;
  if (tag.health) {
    const feed::v1::TagHealth& h = tag.health->tag_health();
    const double since_s = seconds(now_ns - tag.health_received_ns);
    rates = fmt::format("{} {} {}", figure(h.has_range_age_s(), h.range_age_s() + since_s, 6, 1),
                        figure(true, h.range_rate_hz(), 5, 1), figure(true, h.inertial_rate_hz(), 6, 1));
    concerns = concerns_text(*tag.health);
  }
  const Standing::Value standing = standing_of(tag.position, tag.health);
  return cells(name, fmt::format("{} {}", look(standing).shape, Standing::Value_Name(standing)), place, motion, rates,
               concerns);
}

std::string Board::mirror_row(const feed::v1::Mirror& mirror) {
  return cells("", "   or",
               fmt::format("{} {} {} {}", figure(true, mirror.east_m(), 8, 2), figure(true, mirror.north_m(), 8, 2),
                           figure(true, mirror.up_m(), 5, 1),
                           fmt::format("{:>6}", fmt::format("{:.0f} %", 100 * mirror.probability()))),
               "", "", "");
}

std::string Board::anchors_row() const {
  std::string text = "anchors";
  for (const auto& [name, health] : anchors_) {
    text += fmt::format("   {} {:.1f}/s of {} tags", name, health.anchor_health().range_rate_hz(),
                        health.anchor_health().tags_heard());
    if (const std::string concerns = concerns_text(health); !concerns.empty()) text += fmt::format(" ({})", concerns);
  }
  return text;
}

std::string Board::screen(Extent extent, bool colour, TimeNs now_ns) const {
  struct Row {
    std::string text;
    std::string_view colour;
  };
  std::vector<Row> rows = {{head(now_ns), ""}, {"", ""}, {column_heads(), ""}};
  std::vector<Row> foot = {{"", ""}, {anchors_row(), ""}};
  for (const std::string& line : wrapped(greeting_.caution(), extent.columns)) foot.push_back({line, ""});
  std::vector<Row> body;
  for (const auto& [name, tag] : tags_) {
    const std::string_view tint = look(standing_of(tag.position, tag.health)).colour;
    body.push_back({row(name, tag, now_ns), tint});
    if (tag.position && tag.position->has_mirror()) body.push_back({mirror_row(tag.position->mirror()), tint});
  }
  const std::size_t around = rows.size() + foot.size();
  const std::size_t room = extent.rows > around + 1 ? extent.rows - around : 1;
  if (body.size() > room) {
    const std::size_t hidden = body.size() - (room - 1);
    body.resize(room - 1);
    body.push_back({fmt::format("... {} more rows", hidden), ""});
  }
  rows.insert(rows.end(), body.begin(), body.end());
  rows.insert(rows.end(), foot.begin(), foot.end());
  if (rows.size() > extent.rows) rows.resize(extent.rows);
  std::string screen;
  for (const Row& one : rows) {
    const bool tinted = colour && !one.colour.empty();
    screen += fmt::format("{}{}{}\n", tinted ? one.colour : "", clipped(one.text, extent.columns), tinted ? plain : "");
  }
  return screen;
}

std::string Board::lines(TimeNs now_ns) const {
  std::string text = fmt::format("{}\n{}\n", head(now_ns), column_heads());
  for (const auto& [name, tag] : tags_) {
    text += row(name, tag, now_ns) + "\n";
    if (tag.position && tag.position->has_mirror()) text += mirror_row(tag.position->mirror()) + "\n";
  }
  return printable(text);
}

std::string Board::json() const {
  google::protobuf::util::JsonPrintOptions options;
  options.preserve_proto_field_names = true;
  const auto member = [&](std::string_view key, const google::protobuf::Message* message) {
    std::string value;
    if (message == nullptr || !google::protobuf::util::MessageToJsonString(*message, &value, options).ok())
      return std::string();
    return fmt::format(",\"{}\":{}", key, value);
  };
  std::string tags;
  for (const auto& [name, tag] : tags_) {
    tags += fmt::format("{}{{\"tag\":{}{}{}{}}}", tags.empty() ? "" : ",", io::json_quoted(name),
                        member("position", tag.position ? &*tag.position : nullptr),
                        member("speed", tag.speed ? &*tag.speed : nullptr),
                        member("health", tag.health ? &*tag.health : nullptr));
  }
  return fmt::format("{{\"site\":{},\"tags\":[{}]}}\n", io::json_quoted(greeting_.site()), tags);
}

std::string Board::summary() const {
  std::string tags;
  for (const auto& [name, tag] : tags_) {
    tags += fmt::format("{}{}:{{\"messages\":{},\"worst_latency_ms\":{}}}", tags.empty() ? "" : ",",
                        io::json_quoted(name), tag.messages,
                        tag.worst_latency_ns ? fmt::format("{:.3f}", seconds(*tag.worst_latency_ns) * 1e3) : "null");
  }
  return fmt::format("{{\"messages\":{},\"messages_lost\":{},\"tags\":{{{}}}}}\n", messages_, messages_lost_, tags);
}

}  // namespace kedge::lookout
