#include "config/check.h"

#include <fmt/format.h>
#include <google/protobuf/descriptor.h>

#include <Eigen/Core>
#include <Eigen/LU>
#include <array>
#include <cmath>
#include <utility>

#include "config/address.h"
#include "config/rules.h"

namespace kedge::config {
namespace {

namespace pb = google::protobuf;
using pb::FieldDescriptor;
using pb::Message;

constexpr std::array<std::string_view, 6> required_texts = {"Site.name", "Anchor.name", "Tag.name",
                                                            "Link.name", "Place.name",  "Serial.device"};
constexpr std::size_t path_bytes_max = 4000;
constexpr std::size_t socket_path_bytes_max = 107;  // sun_path of unix(7), less its ending zero
constexpr double soft_iron_determinant_min = 1e-3;

std::string join(const std::string& path, const std::string& field) {
  return path.empty() ? field : path + "." + field;
}

class Checker {
 public:
  explicit Checker(const Source& source) : source_(source), c_(source.merged) {}

  std::vector<Problem> run() && {
    problems_ = source_.repeated;
    if (!c_.has_site()) add("site", "is missing; it needs at least a name");
    if (c_.anchors().empty()) add("anchors", "are missing; there must be at least one");
    walk(c_, "");
    counts();
    if (c_.site().has_extent()) extent(c_.site().extent());
    devices();
    anchor_ids();
    for (int i = 0; i < c_.tags_size(); ++i) tag(c_.tags(i), entry_path("tags", c_.tags(i), i));
    links();
    feed();
    limits();
    return std::move(problems_);
  }

 private:
  /// "PATH TEXT" at the place of the path or of what encloses it.
  void add(const std::string& path, const std::string& text) {
    std::string nearest = path;
    while (!nearest.empty()) {
      const auto found = source_.places.find(nearest);
      if (found != source_.places.end()) break;
      const auto dot = nearest.rfind('.');
      nearest = dot == std::string::npos ? std::string() : nearest.substr(0, dot);
    }
    const Place& place = nearest.empty() ? source_.first : source_.places.at(nearest);
    problems_.push_back({place, path + " " + text});
  }

  std::string place_text(const std::string& path) const {
    const auto found = source_.places.find(path);
    return text_of(found == source_.places.end() ? source_.first : found->second);
  }

  // Every field by itself, from the table of rules.

  void walk(const Message& message, const std::string& path) {
    const pb::Reflection& reflection = *message.GetReflection();
    const pb::Descriptor& descriptor = *message.GetDescriptor();
    for (int i = 0; i < descriptor.field_count(); ++i) {
      const FieldDescriptor& field = *descriptor.field(i);
      const std::string here = join(path, field.name());
      if (field.is_repeated()) {
        for (int j = 0; j < reflection.FieldSize(message, &field); ++j) element(message, field, j, here);
      } else if (reflection.HasField(message, &field)) {
        single(message, field, here);
      } else {
        missing(field, here);
      }
    }
  }

  void element(const Message& message, const FieldDescriptor& field, int index, const std::string& here) {
    const pb::Reflection& reflection = *message.GetReflection();
    if (field.cpp_type() == FieldDescriptor::CPPTYPE_MESSAGE) {
      const Message& entry = reflection.GetRepeatedMessage(message, &field, index);
      walk(entry, entry_path(here, entry, index));
    } else if (field.cpp_type() == FieldDescriptor::CPPTYPE_DOUBLE) {
      number(field, here, reflection.GetRepeatedDouble(message, &field, index));
    }
  }

  void single(const Message& message, const FieldDescriptor& field, const std::string& here) {
    const pb::Reflection& reflection = *message.GetReflection();
    switch (field.cpp_type()) {
      case FieldDescriptor::CPPTYPE_MESSAGE:
        return walk(reflection.GetMessage(message, &field), here);
      case FieldDescriptor::CPPTYPE_DOUBLE:
        return number(field, here, reflection.GetDouble(message, &field));
      case FieldDescriptor::CPPTYPE_UINT32:
        return number(field, here, reflection.GetUInt32(message, &field));
      case FieldDescriptor::CPPTYPE_ENUM:
        return word(field, here, reflection.GetEnumValue(message, &field));
      case FieldDescriptor::CPPTYPE_STRING:
        return text(field, here, reflection.GetString(message, &field));
      default:
        return;
    }
  }

  void number(const FieldDescriptor& field, const std::string& here, double value) {
    const Rule& rule = rule_of(field);
    if (value >= rule.low && value <= rule.high) return;
    const std::string_view gap = rule.unit.empty() ? "" : " ";
    if (std::isnan(value)) {
      add(here, fmt::format("is not a number; it must be {} to {}{}{}", rule.low, rule.high, gap, rule.unit));
    } else {
      add(here, fmt::format("is {}; it must be {} to {}{}{}", value, rule.low, rule.high, gap, rule.unit));
    }
  }

  void word(const FieldDescriptor& field, const std::string& here, int value) {
    const pb::EnumDescriptor& words = *field.enum_type();
    if (words.FindValueByNumber(value) != nullptr) return;
    std::string known;
    for (int i = 0; i < words.value_count(); ++i) known += (i > 0 ? ", " : "") + words.value(i)->name();
    add(here, fmt::format("is {}; it must be one of {}", value, known));
  }

  void text(const FieldDescriptor& field, const std::string& here, const std::string& value) {
    if (field.name() == "name") {
      if (!is_name(value)) {
        add(here, fmt::format("is {}; a name is 1 to 32 of a to z, 0 to 9, '_' and '-'", in_quotes(value)));
      }
      return;
    }
    const bool socket = field.name() == "unix";
    const std::size_t bytes_max = socket ? socket_path_bytes_max : path_bytes_max;
    bool prints = true;
    for (const char c : value) prints = prints && static_cast<unsigned char>(c) >= 0x20 && c != 0x7f;
    if (value.empty()) {
      add(here, "is empty; leave the field out instead");
    } else if (!prints) {
      add(here, fmt::format("is {}; control characters are not allowed", in_quotes(value)));
    } else if (value.size() > bytes_max) {
      add(here, fmt::format("has {} bytes; it must not be longer than {}", value.size(), bytes_max));
    }
  }

  void missing(const FieldDescriptor& field, const std::string& here) {
    const auto type = field.cpp_type();
    bool required = false;
    if (type == FieldDescriptor::CPPTYPE_DOUBLE || type == FieldDescriptor::CPPTYPE_UINT32) {
      required = rule_of(field).absence == Rule::Absence::refused;
    } else if (type == FieldDescriptor::CPPTYPE_STRING) {
      const std::string name = field.containing_type()->name() + "." + field.name();
      for (const std::string_view one : required_texts) required = required || one == name;
    }
    if (required) add(here, "is missing");
  }

  // Fields against each other.

  void counts() {
    const auto at_most = [&](const char* list, int size, int most) {
      if (size > most) add(list, fmt::format("has {} entries; at most {} are allowed", size, most));
    };
    at_most("anchors", c_.anchors_size(), anchors_max);
    at_most("tags", c_.tags_size(), tags_max);
    at_most("links", c_.links_size(), links_max);
    at_most("site.places", c_.site().places_size(), places_max);
  }

  void extent(const v1::Box& box) {
    const std::string path = "site.extent";
    if (box.has_east_min_m() && box.has_east_max_m() && !(box.east_min_m() < box.east_max_m())) {
      add(path, fmt::format("is empty: east_min_m {} is not below east_max_m {}", box.east_min_m(), box.east_max_m()));
    }
    if (box.has_north_min_m() && box.has_north_max_m() && !(box.north_min_m() < box.north_max_m())) {
      add(path,
          fmt::format("is empty: north_min_m {} is not below north_max_m {}", box.north_min_m(), box.north_max_m()));
    }
  }

  void once(std::map<std::string, std::string>& users, const std::string& value, const std::string& path) {
    const auto [first, fresh] = users.emplace(value, path);
    if (!fresh) add(path, fmt::format("is {}, as is {} at {}", value, first->second, place_text(first->second)));
  }

  void devices() {
    std::map<std::string, std::string> users;
    for (int i = 0; i < c_.anchors_size(); ++i) {
      const v1::Anchor& anchor = c_.anchors(i);
      if (anchor.has_device_id()) {
        once(users, fmt::format("{}", anchor.device_id()), entry_path("anchors", anchor, i) + ".device_id");
      }
    }
    for (int i = 0; i < c_.tags_size(); ++i) {
      const v1::Tag& tag = c_.tags(i);
      if (tag.has_device_id()) {
        once(users, fmt::format("{}", tag.device_id()), entry_path("tags", tag, i) + ".device_id");
      }
    }
  }

  void anchor_ids() {
    std::map<std::string, std::string> users;
    for (int i = 0; i < c_.anchors_size(); ++i) {
      const v1::Anchor& anchor = c_.anchors(i);
      if (anchor.has_anchor_id()) {
        once(users, fmt::format("{}", anchor.anchor_id()), entry_path("anchors", anchor, i) + ".anchor_id");
      }
    }
  }

  void tag(const v1::Tag& tag, const std::string& path) {
    const v1::Start& start = tag.start();
    if (start.has_heading_deg() && !start.has_heading_sigma_deg()) {
      add(path + ".start.heading_sigma_deg", "is missing; heading_deg needs it");
    }
    if (start.has_heading_sigma_deg() && !start.has_heading_deg()) {
      add(path + ".start.heading_deg", "is missing; heading_sigma_deg has no meaning without it");
    }
    if (const double delay_max_s = limit("delay_max_s"); tag.range_lag_s() > delay_max_s) {
      add(path + ".range_lag_s",
          fmt::format("does not fit: range_lag_s {} s is above limits.delay_max_s {} s, so every range would come too "
                      "late to be used",
                      tag.range_lag_s(), delay_max_s));
    }
    const v1::Magnetometer& magnetometer = tag.magnetometer();
    const int hard = magnetometer.hard_iron_ut_size();
    if (hard != 0 && hard != 3) {
      add(path + ".magnetometer.hard_iron_ut", fmt::format("has {} values; it must have 3 or none", hard));
    }
    const int soft = magnetometer.soft_iron_size();
    if (soft != 0 && soft != 9) {
      add(path + ".magnetometer.soft_iron", fmt::format("has {} values; it must have 9 or none", soft));
    }
    if (soft == 9) {
      const Eigen::Map<const Eigen::Matrix3d> matrix(magnetometer.soft_iron().data());
      const double determinant = matrix.determinant();
      if (!(std::abs(determinant) >= soft_iron_determinant_min)) {
        add(path + ".magnetometer.soft_iron", fmt::format("has the determinant {}; below {} it loses a direction",
                                                          determinant, soft_iron_determinant_min));
      }
    }
  }

  void links() {
    std::map<std::string, std::string> users;
    for (int i = 0; i < c_.links_size(); ++i) {
      const v1::Link& link = c_.links(i);
      const std::string path = entry_path("links", link, i);
      if (link.has_udp()) {
        const std::string address = link.udp().has_address() ? link.udp().address() : "127.0.0.1";
        if (!is_ip_address(address)) {
          add(path + ".udp.address",
              fmt::format("is {}; it must be an IPv4 or IPv6 address in numbers", in_quotes(address)));
        }
        if (link.udp().has_port()) once(users, fmt::format("{} port {}", address, link.udp().port()), path + ".udp");
      } else if (link.has_serial()) {
        if (link.serial().has_device()) once(users, in_quotes(link.serial().device()), path + ".serial");
      } else {
        add(path, "has no port; it needs udp or serial");
      }
    }
  }

  void feed() {
    const v1::Feed& feed = c_.feed();
    if (feed.has_tcp()) {
      const Result<HostPort> address = parse_host_port(feed.tcp());
      if (!address) {
        add("feed.tcp", address.error());
      } else if (!is_loopback(address->host) && !feed.allow_remote()) {
        add("feed.tcp", fmt::format("is {}, which other computers can reach, and the feed is neither encrypted nor "
                                    "authenticated; write allow_remote: true if that is meant",
                                    in_quotes(feed.tcp())));
      }
    }
    if (feed.has_unix() && c_.control().has_unix() && feed.unix() == c_.control().unix()) {
      add("control.unix", fmt::format("is {}, as is feed.unix at {}", in_quotes(feed.unix()), place_text("feed.unix")));
    }
  }

  /// A number of the limits, its default where it is not written.
  double limit(const char* name) const {
    const v1::Limits& limits = c_.limits();
    const FieldDescriptor& field = *limits.GetDescriptor()->FindFieldByName(name);
    const pb::Reflection& reflection = *limits.GetReflection();
    return reflection.HasField(limits, &field) ? reflection.GetDouble(limits, &field) : rule_of(field).standard;
  }

  void limits() {
    const auto ordered = [&](const char* low, const char* high, const char* unit) {
      // A number out of range is told elsewhere.
      if (!(limit(low) > limit(high))) return;
      const std::string blamed = source_.places.contains(join("limits", high)) ? high : low;
      add(join("limits", blamed),
          fmt::format("does not fit: {} {} {} is above {} {} {}", low, limit(low), unit, high, limit(high), unit));
    };
    ordered("settled_enter_m", "settled_leave_m", "m");
    ordered("settled_leave_m", "lost_radius_m", "m");
    ordered("range_stale_s", "silent_s", "s");
    ordered("inertial_stale_s", "silent_s", "s");
  }

  const Source& source_;
  const v1::Configuration& c_;
  std::vector<Problem> problems_;
};

}  // namespace

std::vector<Problem> check(const Source& source) { return Checker(source).run(); }

}  // namespace kedge::config
