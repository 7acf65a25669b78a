#include "feed/encoding.h"

#include <fmt/format.h>
#include <google/protobuf/descriptor.h>
#include <google/protobuf/io/coded_stream.h>
#include <google/protobuf/message.h>

#include <cmath>
#include <iterator>
#include <string_view>

#include "core/assert.h"

namespace kedge::feed {
namespace {

using google::protobuf::FieldDescriptor;
using google::protobuf::Message;
using google::protobuf::Reflection;

// The library's own JSON printer takes some 30 us a message and puts fields in an order of its own; at
// 200 tags that would be a tenth of a processor for one encoding.
class JsonWriter {
 public:
  explicit JsonWriter(std::string& out) : out_(out) {}

  void object(const Message& message) {
    const auto& descriptor = *message.GetDescriptor();
    out_ += '{';
    bool first = true;
    for (int i = 0; i < descriptor.field_count(); ++i) {
      const FieldDescriptor& field = *descriptor.field(i);
      if (!written(message, field)) continue;
      if (!first) out_ += ',';
      first = false;
      string(field.name());
      out_ += ':';
      if (field.is_repeated()) {
        array(message, field);
      } else {
        value(message, field, -1);
      }
    }
    out_ += '}';
  }

 private:
  static bool written(const Message& message, const FieldDescriptor& field) {
    if (field.is_repeated()) return true;
    const Reflection& reflection = *message.GetReflection();
    if (field.has_presence() && !reflection.HasField(message, &field)) return false;
    // JSON has no such numbers.
    return field.cpp_type() != FieldDescriptor::CPPTYPE_DOUBLE || std::isfinite(reflection.GetDouble(message, &field));
  }

  void array(const Message& message, const FieldDescriptor& field) {
    out_ += '[';
    const int size = message.GetReflection()->FieldSize(message, &field);
    for (int i = 0; i < size; ++i) {
      if (i > 0) out_ += ',';
      value(message, field, i);
    }
    out_ += ']';
  }

  /// `index` is of a repeated field, -1 for a single one.
  void value(const Message& message, const FieldDescriptor& field, int index) {
    const Reflection& r = *message.GetReflection();
    const bool one = index < 0;
    std::string scratch;
    switch (field.cpp_type()) {
      case FieldDescriptor::CPPTYPE_MESSAGE:
        return object(one ? r.GetMessage(message, &field) : r.GetRepeatedMessage(message, &field, index));
      case FieldDescriptor::CPPTYPE_STRING:
        return string(one ? r.GetStringReference(message, &field, &scratch)
                          : r.GetRepeatedStringReference(message, &field, index, &scratch));
      case FieldDescriptor::CPPTYPE_ENUM:
        return enumeration(field,
                           one ? r.GetEnumValue(message, &field) : r.GetRepeatedEnumValue(message, &field, index));
      case FieldDescriptor::CPPTYPE_DOUBLE: {
        const double number = one ? r.GetDouble(message, &field) : r.GetRepeatedDouble(message, &field, index);
        // An element cannot be left out; nothing that is not finite is ever put into a list.
        KEDGE_ASSERT(std::isfinite(number));
        return print("{}", number);
      }
      case FieldDescriptor::CPPTYPE_INT64:
        return print("\"{}\"", one ? r.GetInt64(message, &field) : r.GetRepeatedInt64(message, &field, index));
      case FieldDescriptor::CPPTYPE_UINT64:
        return print("\"{}\"", one ? r.GetUInt64(message, &field) : r.GetRepeatedUInt64(message, &field, index));
      case FieldDescriptor::CPPTYPE_INT32:
        return print("{}", one ? r.GetInt32(message, &field) : r.GetRepeatedInt32(message, &field, index));
      case FieldDescriptor::CPPTYPE_UINT32:
        return print("{}", one ? r.GetUInt32(message, &field) : r.GetRepeatedUInt32(message, &field, index));
      case FieldDescriptor::CPPTYPE_BOOL:
        return print("{}", one ? r.GetBool(message, &field) : r.GetRepeatedBool(message, &field, index));
      case FieldDescriptor::CPPTYPE_FLOAT:
        break;
    }
    KEDGE_ASSERT(false && "feed.proto has no such field");
  }

  void enumeration(const FieldDescriptor& field, int number) {
    const auto* word = field.enum_type()->FindValueByNumber(number);
    if (word == nullptr) return print("{}", number);
    string(word->name());
  }

  void string(std::string_view text) {
    out_ += '"';
    for (const char c : text) {
      if (c == '"' || c == '\\') {
        out_ += '\\';
        out_ += c;
      } else if (static_cast<unsigned char>(c) < 0x20) {
        print("\\u{:04x}", static_cast<unsigned>(c));
      } else {
        out_ += c;
      }
    }
    out_ += '"';
  }

  template <class Number>
  void print(fmt::format_string<Number&> format, Number number) {
    fmt::format_to(std::back_inserter(out_), format, number);
  }

  std::string& out_;
};

}  // namespace

std::string encode(const v1::Message& message, Encoding encoding) {
  std::string bytes;
  if (encoding == Encoding::json) {
    bytes.reserve(512);
    JsonWriter(bytes).object(message);
    bytes += '\n';
    return bytes;
  }
  const std::size_t size = message.ByteSizeLong();
  bytes.resize(google::protobuf::io::CodedOutputStream::VarintSize64(size) + size);
  auto* out = reinterpret_cast<google::protobuf::uint8*>(bytes.data());
  out = google::protobuf::io::CodedOutputStream::WriteVarint64ToArray(size, out);
  message.SerializeWithCachedSizesToArray(out);
  return bytes;
}

const SharedBytes& EncodedMessage::bytes(Encoding encoding) {
  SharedBytes& bytes = bytes_.at(static_cast<std::size_t>(encoding));
  if (!bytes) bytes = std::make_shared<const std::string>(encode(message_, encoding));
  return bytes;
}

}  // namespace kedge::feed
