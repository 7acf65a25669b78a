#include "convert/from_messages.h"

#include <fmt/core.h>
#include <google/protobuf/descriptor.h>

#include <array>

#include "convert/table_writer.h"

namespace kedge::convert {

namespace {

namespace pb = google::protobuf;

// Upper triangle of a covariance, row-major, as proto/feed.proto has it.
constexpr std::array<const char*, 6> covariance_names = {"ee", "en", "eu", "nn", "nu", "uu"};

bool is_concerns(const pb::FieldDescriptor& field) { return field.is_repeated() && field.message_type() != nullptr; }

void add_columns(const pb::Descriptor& message, const std::string& prefix, std::string& columns) {
  for (int i = 0; i < message.field_count(); ++i) {
    const pb::FieldDescriptor& field = *message.field(i);
    if (field.is_repeated() && !is_concerns(field)) {
      for (const char* name : covariance_names) columns += fmt::format(",{}{}_{}", prefix, field.name(), name);
    } else if (field.message_type() != nullptr && !is_concerns(field)) {
      add_columns(*field.message_type(), prefix + field.name() + "_", columns);
    } else {
      columns += fmt::format(",{}{}", prefix, field.name());
    }
  }
}

/// "range_stale=2.5 battery_low=3.1": the concerns and their figures.
std::string concerns_text(const pb::Message& message, const pb::FieldDescriptor& field) {
  std::string text;
  for (int i = 0; i < message.GetReflection()->FieldSize(message, &field); ++i) {
    const pb::Message& entry = message.GetReflection()->GetRepeatedMessage(message, &field, i);
    const auto* concern = dynamic_cast<const feed::v1::Concern*>(&entry);
    if (concern == nullptr) continue;
    const std::string& word = feed::v1::Concern::Value_Name(concern->concern());
    text += fmt::format("{}{}={}", text.empty() ? "" : " ", word, concern->figure());
  }
  return text;
}

void add_value(const pb::Message& message, const pb::FieldDescriptor& field, TableWriter& table) {
  const pb::Reflection& get = *message.GetReflection();
  const bool absent = field.has_presence() && !get.HasField(message, &field);
  if (absent) return table.empty();
  switch (field.cpp_type()) {
    case pb::FieldDescriptor::CPPTYPE_DOUBLE:
      return table.number(get.GetDouble(message, &field));
    case pb::FieldDescriptor::CPPTYPE_INT64:
      return table.count(get.GetInt64(message, &field));
    case pb::FieldDescriptor::CPPTYPE_UINT64:
      return table.count(get.GetUInt64(message, &field));
    case pb::FieldDescriptor::CPPTYPE_UINT32:
      return table.count(std::uint64_t{get.GetUInt32(message, &field)});
    case pb::FieldDescriptor::CPPTYPE_BOOL:
      return table.cell(get.GetBool(message, &field) ? "1" : "0");
    case pb::FieldDescriptor::CPPTYPE_STRING:
      return table.cell(get.GetString(message, &field));
    case pb::FieldDescriptor::CPPTYPE_ENUM: {
      const int value = get.GetEnumValue(message, &field);
      const pb::EnumValueDescriptor* word = field.enum_type()->FindValueByNumber(value);
      return table.cell(word == nullptr ? fmt::format("{}", value) : word->name());
    }
    default:
      return table.empty();
  }
}

/// The cells that add_columns has named, in its order; all empty where the message is absent.
void add_cells(const pb::Message& message, bool present, TableWriter& table) {
  const pb::Reflection& get = *message.GetReflection();
  for (int i = 0; i < message.GetDescriptor()->field_count(); ++i) {
    const pb::FieldDescriptor& field = *message.GetDescriptor()->field(i);
    if (is_concerns(field)) {
      table.cell(concerns_text(message, field));
    } else if (field.is_repeated()) {
      const bool whole = get.FieldSize(message, &field) == static_cast<int>(covariance_names.size());
      for (int j = 0; j < static_cast<int>(covariance_names.size()); ++j) {
        if (whole) {
          table.number(get.GetRepeatedDouble(message, &field, j));
        } else {
          table.empty();
        }
      }
    } else if (field.message_type() != nullptr) {
      add_cells(get.GetMessage(message, &field), get.HasField(message, &field), table);
    } else if (present) {
      add_value(message, field, table);
    } else {
      table.empty();
    }
  }
}

template <class Message>
class MessageTable {
 public:
  explicit MessageTable(const std::filesystem::path& path) : table_(path, columns()) {}

  void add(const Message& message) {
    table_.time(message.time_ns());
    add_cells(message, true, table_);
    table_.end_row();
  }
  [[nodiscard]] std::uint64_t rows() const { return table_.rows(); }
  Status close() { return table_.close(); }

 private:
  static std::string columns() {
    std::string columns = "t_s";
    add_columns(*Message::descriptor(), "", columns);
    return columns;
  }

  TableWriter table_;
};

}  // namespace

Result<FromMessages> write_message_tables(const std::filesystem::path& messages, const std::filesystem::path& folder) {
  if (Status status = prepare_folder(folder, {"positions.csv", "speeds.csv", "health.csv"}); !status) {
    return Error{status.error()};
  }
  MessageTable<feed::v1::Position> positions(folder / "positions.csv");
  MessageTable<feed::v1::Speed> speeds(folder / "speeds.csv");
  MessageTable<feed::v1::Health> health(folder / "health.csv");
  const auto read = scoring::read_messages(messages, [&](const feed::v1::Message& message) {
    if (message.has_position()) positions.add(message.position());
    if (message.has_speed()) speeds.add(message.speed());
    if (message.has_health()) health.add(message.health());
  });
  if (!read) return Error{read.error()};
  for (const Status& status : {positions.close(), speeds.close(), health.close()}) {
    if (!status) return Error{status.error()};
  }
  return FromMessages{*read, positions.rows(), speeds.rows(), health.rows()};
}

}  // namespace kedge::convert
