#include <google/protobuf/descriptor.h>
#include <google/protobuf/text_format.h>
#include <google/protobuf/util/message_differencer.h>

#include <catch2/catch.hpp>
#include <filesystem>
#include <functional>
#include <set>

#include "config/load.h"
#include "config/print.h"
#include "config/rules.h"
#include "config/settings.h"

namespace kedge::config {
namespace {

namespace pb = google::protobuf;

const std::filesystem::path folder = std::filesystem::path(KEDGE_SOURCE_DIR) / "config";

v1::Configuration loaded(const std::string& name) {
  const Loaded result = load(folder / name);
  INFO((result.errors.empty() ? std::string() : result.errors.front()));
  REQUIRE(result.merged.has_value());
  return *result.merged;
}

/// Visits every field of the message and of those within it.
void each_field(const pb::Message& message,
                const std::function<void(const pb::Message&, const pb::FieldDescriptor&)>& visit) {
  const pb::Reflection& reflection = *message.GetReflection();
  std::vector<const pb::FieldDescriptor*> fields;
  reflection.ListFields(message, &fields);
  for (const pb::FieldDescriptor* field : fields) {
    visit(message, *field);
    if (field->cpp_type() != pb::FieldDescriptor::CPPTYPE_MESSAGE) continue;
    if (!field->is_repeated()) each_field(reflection.GetMessage(message, field), visit);
    for (int i = 0; field->is_repeated() && i < reflection.FieldSize(message, field); ++i) {
      each_field(reflection.GetRepeatedMessage(message, field, i), visit);
    }
  }
}

/// Full names of all fields that a configuration can hold.
std::set<std::string> all_fields() {
  std::set<std::string> names;
  const std::function<void(const pb::Descriptor&)> collect = [&](const pb::Descriptor& type) {
    for (int i = 0; i < type.field_count(); ++i) {
      names.insert(type.field(i)->full_name());
      if (type.field(i)->message_type() != nullptr) collect(*type.field(i)->message_type());
    }
  };
  collect(*v1::Configuration::descriptor());
  return names;
}

TEST_CASE("every shipped configuration loads, alone or as a fragment of another one") {
  std::set<std::string> names;
  for (const auto& entry : std::filesystem::directory_iterator(folder)) names.insert(entry.path().filename().string());
  CHECK(names == std::set<std::string>{"calibration.txtpb", "demo.txtpb", "full.txtpb", "minimal.txtpb"});
  names.erase("calibration.txtpb");  // full.txtpb includes it
  for (const std::string& name : names) loaded(name);
  CHECK(loaded("full.txtpb").tags(0).magnetometer().soft_iron_size() == 9);
}

TEST_CASE("the full configuration shows every field of the proto") {
  std::set<std::string> shown = {"kedge.config.v1.Configuration.include"};  // gone once it is merged
  each_field(loaded("full.txtpb"),
             [&](const pb::Message&, const pb::FieldDescriptor& field) { shown.insert(field.full_name()); });
  CHECK(shown == all_fields());
}

TEST_CASE("the full configuration shows the defaults") {
  int compared = 0;
  each_field(loaded("full.txtpb"), [&](const pb::Message& message, const pb::FieldDescriptor& field) {
    const bool real = field.cpp_type() == pb::FieldDescriptor::CPPTYPE_DOUBLE;
    if (field.is_repeated() || (!real && field.cpp_type() != pb::FieldDescriptor::CPPTYPE_UINT32)) return;
    const Rule& rule = rule_of(field);
    if (rule.absence != Rule::Absence::filled) return;
    INFO(field.full_name());
    const pb::Reflection& reflection = *message.GetReflection();
    CHECK((real ? reflection.GetDouble(message, &field) : reflection.GetUInt32(message, &field)) == rule.standard);
    ++compared;
  });
  CHECK(compared > 30);
}

TEST_CASE("there is one rule for every number, and its default lies within it") {
  std::set<std::string> numbers;
  const std::function<void(const pb::Descriptor&)> collect = [&](const pb::Descriptor& type) {
    for (int i = 0; i < type.field_count(); ++i) {
      const pb::FieldDescriptor& field = *type.field(i);
      if (field.message_type() != nullptr) collect(*field.message_type());
      const auto cpp_type = field.cpp_type();
      if (cpp_type == pb::FieldDescriptor::CPPTYPE_DOUBLE || cpp_type == pb::FieldDescriptor::CPPTYPE_UINT32) {
        numbers.insert(type.name() + "." + field.name());
      }
    }
  };
  collect(*v1::Configuration::descriptor());
  std::set<std::string> ruled;
  for (const Rule& rule : rules()) {
    INFO(rule.field);
    CHECK(ruled.emplace(rule.field).second);
    CHECK(rule.low < rule.high);
    if (rule.absence == Rule::Absence::filled) {
      CHECK(rule.standard >= rule.low);
      CHECK(rule.standard <= rule.high);
    }
  }
  CHECK(ruled == numbers);
}

TEST_CASE("what is printed loads to the same") {
  for (const std::string name : {"minimal.txtpb", "full.txtpb", "demo.txtpb"}) {
    INFO(name);
    const v1::Configuration original = loaded(name);
    const std::string text = print(original);
    const Loaded again = load_text(text, "printed");
    REQUIRE(again.errors == std::vector<std::string>{});
    CHECK(pb::util::MessageDifferencer::Equals(with_defaults(*again.merged), with_defaults(original)));
    CHECK(print(*again.merged) == text);
  }
}

TEST_CASE("the printed configuration spells out defaults, zeros included, and invents nothing") {
  const std::string text = print(loaded("minimal.txtpb"));
  for (const char* line :
       {"  bearing_deg: 0\n", "  tick_hz: 10\n", "    address: \"127.0.0.1\"\n", "    present: true\n",
        "  allow_remote: false\n", "  range_sigma_m: 0.12\n", "  method: standard\n", "  speed_max_mps: 3\n"}) {
    INFO(text);
    CHECK(text.find(line) != std::string::npos);
  }
  for (const char* absent : {"start", "dip_deg", "field_ut", "extent", "battery_low_v", "hard_iron_ut", "unix"}) {
    INFO(absent);
    CHECK(text.find(absent) == std::string::npos);
  }
}

TEST_CASE("the demo site is what the demonstration counts on") {
  const pipeline::Settings settings = settings_from(loaded("demo.txtpb"));
  REQUIRE(settings.tags.size() == 6);
  for (const pipeline::TagSettings& tag : settings.tags) {
    INFO(tag.model.name);
    CHECK(tag.model.start.has_value());
    CHECK(tag.magnetometer_calibrated);
    CHECK((tag.model.profile == fusion::Profile::flyer) == (tag.model.name == "flyer-1"));
  }
  CHECK(settings.site.anchors.size() == 1);
}

}  // namespace
}  // namespace kedge::config
