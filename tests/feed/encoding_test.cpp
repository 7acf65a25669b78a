#include "feed/encoding.h"

#include <google/protobuf/io/coded_stream.h>
#include <google/protobuf/struct.pb.h>
#include <google/protobuf/util/delimited_message_util.h>
#include <google/protobuf/util/json_util.h>
#include <google/protobuf/util/message_differencer.h>

#include <catch2/catch.hpp>
#include <limits>
#include <random>

#include "feed/greeting.h"
#include "support/feed_settings.h"

namespace kedge::feed {
namespace {

namespace pb = google::protobuf;

/// A message with every field drawn at random, or left out.
class RandomMessage {
 public:
  explicit RandomMessage(std::uint32_t seed) : random_(seed) {}

  void fill(pb::Message& message) {
    const pb::Descriptor& descriptor = *message.GetDescriptor();
    const pb::Reflection& r = *message.GetReflection();
    for (int i = 0; i < descriptor.field_count(); ++i) {
      const pb::FieldDescriptor* field = descriptor.field(i);
      if (field->is_repeated()) {
        for (std::uint32_t n = draw(4); n > 0; --n) add(message, r, field);
      } else if (draw(3) != 0) {
        set(message, r, field);
      }
    }
  }

 private:
  std::uint32_t draw(std::uint32_t below) { return static_cast<std::uint32_t>(random_() % below); }
  std::uint64_t bits() { return random_(); }
  double number() {
    switch (draw(4)) {
      case 0:
        return 0.0;
      case 1:
        return std::ldexp(static_cast<double>(bits()), static_cast<int>(draw(1800)) - 900);
      case 2:
        return -static_cast<double>(draw(1000)) / 7.0;
      default:
        return static_cast<double>(draw(100));
    }
  }
  std::string text() {
    static constexpr std::array<const char*, 5> texts = {"", "cart-1", "a\"b\\c/", "\x01\n\t\x1f", "K\xc3\xbcste"};
    return texts.at(draw(texts.size()));
  }

  void set(pb::Message& message, const pb::Reflection& r, const pb::FieldDescriptor* field) {
    switch (field->cpp_type()) {
      case pb::FieldDescriptor::CPPTYPE_MESSAGE:
        return fill(*r.MutableMessage(&message, field));
      case pb::FieldDescriptor::CPPTYPE_STRING:
        return r.SetString(&message, field, text());
      case pb::FieldDescriptor::CPPTYPE_DOUBLE:
        return r.SetDouble(&message, field, number());
      case pb::FieldDescriptor::CPPTYPE_INT64:
        return r.SetInt64(&message, field, static_cast<std::int64_t>(bits()));
      case pb::FieldDescriptor::CPPTYPE_UINT64:
        return r.SetUInt64(&message, field, bits());
      case pb::FieldDescriptor::CPPTYPE_UINT32:
        return r.SetUInt32(&message, field, static_cast<std::uint32_t>(bits()));
      case pb::FieldDescriptor::CPPTYPE_BOOL:
        return r.SetBool(&message, field, draw(2) == 1);
      case pb::FieldDescriptor::CPPTYPE_ENUM:
        return r.SetEnumValue(&message, field,
                              static_cast<int>(draw(static_cast<std::uint32_t>(field->enum_type()->value_count()))));
      default:
        FAIL("feed.proto has a field of a new type: " << field->full_name());
    }
  }
  void add(pb::Message& message, const pb::Reflection& r, const pb::FieldDescriptor* field) {
    switch (field->cpp_type()) {
      case pb::FieldDescriptor::CPPTYPE_MESSAGE:
        return fill(*r.AddMessage(&message, field));
      case pb::FieldDescriptor::CPPTYPE_STRING:
        return r.AddString(&message, field, text());
      case pb::FieldDescriptor::CPPTYPE_DOUBLE:
        return r.AddDouble(&message, field, number());
      default:
        FAIL("feed.proto has a list of a new type: " << field->full_name());
    }
  }

  std::mt19937_64 random_;
};

std::string differences(const pb::Message& a, const pb::Message& b) {
  std::string report;
  pb::util::MessageDifferencer differencer;
  differencer.ReportDifferencesToString(&report);
  differencer.Compare(a, b);
  return report;
}

// Outside check: the JSON mapping of the Protocol Buffers documentation, as libprotobuf 3.21 implements it.
TEST_CASE("JSON is what libprotobuf writes, in the order of the proto, and reads back to the bit") {
  pb::util::JsonPrintOptions options;
  options.preserve_proto_field_names = true;
  options.always_print_primitive_fields = true;
  for (std::uint32_t seed = 1; seed <= 300; ++seed) {
    v1::Message message;
    RandomMessage(seed).fill(message);
    const std::string line = encode(message, Encoding::json);
    INFO("seed " << seed << ": " << line);
    REQUIRE(line.find('\n') == line.size() - 1);

    v1::Message back;
    REQUIRE(pb::util::JsonStringToMessage(line, &back).ok());
    CHECK(differences(message, back).empty());

    std::string theirs;
    REQUIRE(pb::util::MessageToJsonString(message, &theirs, options).ok());
    pb::Struct our_values;
    pb::Struct their_values;
    REQUIRE(pb::util::JsonStringToMessage(line, &our_values).ok());
    REQUIRE(pb::util::JsonStringToMessage(theirs, &their_values).ok());
    CHECK(differences(their_values, our_values).empty());
  }
}

TEST_CASE("what is unknown is absent, zero is written, long integers are strings") {
  v1::Message message;
  message.set_sequence(18446744073709551615U);
  message.mutable_position()->set_tag("cart-1");
  message.mutable_position()->set_north_m(0.0);
  message.mutable_position()->set_up_m(0.1);
  CHECK(
      encode(message, Encoding::json) ==
      R"({"sequence":"18446744073709551615","position":{"tag":"cart-1","time_ns":"0","utc_ns":"0","standing":"silent",)"
      R"("north_m":0,"up_m":0.1,"covariance_m2":[]}})"
      "\n");
}

TEST_CASE("a number that is not finite is left out of JSON") {
  v1::Message message;
  message.mutable_speed()->set_speed_mps(std::numeric_limits<double>::quiet_NaN());
  message.mutable_speed()->set_climb_mps(-std::numeric_limits<double>::infinity());
  CHECK(encode(message, Encoding::json) ==
        "{\"sequence\":\"0\",\"speed\":{\"tag\":\"\",\"time_ns\":\"0\",\"utc_ns\":\"0\"}}\n");
}

TEST_CASE("the delimited form is read by the library's own reader") {
  std::string stream;
  std::vector<v1::Message> messages(50);
  for (std::uint32_t i = 0; i < messages.size(); ++i) {
    RandomMessage(1000 + i).fill(messages[i]);
    stream += encode(messages[i], Encoding::delimited);
  }
  pb::io::CodedInputStream in(reinterpret_cast<const pb::uint8*>(stream.data()), static_cast<int>(stream.size()));
  for (const v1::Message& message : messages) {
    v1::Message back;
    REQUIRE(pb::util::ParseDelimitedFromCodedStream(&back, &in, nullptr));
    CHECK(differences(message, back).empty());
  }
}

TEST_CASE("an encoded message is made once and shared") {
  v1::Message message;
  message.mutable_pulse();
  EncodedMessage encoded(message);
  const SharedBytes first = encoded.bytes(Encoding::json);
  CHECK(encoded.bytes(Encoding::json).get() == first.get());
  CHECK(*first == encode(message, Encoding::json));
  CHECK(*encoded.bytes(Encoding::delimited) == encode(message, Encoding::delimited));
}

}  // namespace
}  // namespace kedge::feed
