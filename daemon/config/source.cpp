#include "config/source.h"

#include <fmt/format.h>
#include <google/protobuf/descriptor.h>
#include <google/protobuf/io/tokenizer.h>
#include <google/protobuf/io/zero_copy_stream_impl_lite.h>
#include <google/protobuf/text_format.h>

#include <algorithm>
#include <fstream>
#include <set>
#include <system_error>
#include <utility>

#include "config/load.h"
#include "core/result.h"

namespace kedge::config {
namespace {

namespace pb = google::protobuf;
using pb::FieldDescriptor;
using pb::Message;
using Tree = pb::TextFormat::ParseInfoTree;

constexpr int nesting_max = 16;  // of messages in text; the proto itself needs 4
constexpr std::size_t quoted_bytes_max = 80;

class Collector : public pb::io::ErrorCollector {
 public:
  Collector(std::string file, std::vector<Problem>& problems) : file_(std::move(file)), problems_(problems) {}

  void AddError(int line, pb::io::ColumnNumber column, const std::string& message) override {
    problems_.push_back({{file_, line + 1, column + 1}, message});
  }

 private:
  std::string file_;
  std::vector<Problem>& problems_;
};

Result<std::string> read_bounded(const std::filesystem::path& path) {
  std::error_code code;
  const auto status = std::filesystem::status(path, code);
  if (status.type() == std::filesystem::file_type::not_found) return Error{"there is no such file"};
  if (code) return Error{code.message()};
  if (!std::filesystem::is_regular_file(status)) return Error{"this is not a file"};
  std::ifstream in(path, std::ios::binary);
  if (!in) return Error{"the file cannot be opened: " + std::generic_category().message(errno)};
  std::string text(file_bytes_max + 1, '\0');
  in.read(text.data(), static_cast<std::streamsize>(text.size()));
  if (in.bad()) return Error{"the file cannot be read: " + std::generic_category().message(errno)};
  text.resize(static_cast<std::size_t>(in.gcount()));
  if (text.size() > file_bytes_max) return Error{fmt::format("the file is larger than {} bytes", file_bytes_max)};
  return text;
}

/// The name of an entry of a list; empty where it has none.
std::string name_of(const Message& entry) {
  const FieldDescriptor* field = entry.GetDescriptor()->FindFieldByName("name");
  return field == nullptr ? std::string() : entry.GetReflection()->GetString(entry, field);
}

class Reader {
 public:
  Source source;

  void file(const std::filesystem::path& path, const Place* included_at) {
    const std::string shown = path.string();
    const auto refuse = [&](std::string why) {
      const std::string text = included_at == nullptr ? why : fmt::format("include {}: {}", in_quotes(shown), why);
      source.syntax.push_back({included_at == nullptr ? Place{shown} : *included_at, text});
    };
    if (std::cmp_greater_equal(open_.size(), include_depth_max)) {
      return refuse(fmt::format("includes are nested deeper than {} files", include_depth_max));
    }
    if (++files_ > files_max) return refuse(fmt::format("more than {} files are included", files_max));
    const Result<std::string> text = read_bounded(path);
    if (!text) return refuse(text.error());
    std::error_code code;
    const auto canonical = std::filesystem::canonical(path, code);
    if (std::find(open_.begin(), open_.end(), canonical) != open_.end()) return refuse("the file includes itself");
    open_.push_back(canonical);
    parse(*text, shown, &path);
    open_.pop_back();
  }

  /// `path` is null for a text that is not a file.
  void parse(std::string_view text, const std::string& shown, const std::filesystem::path* path) {
    v1::Configuration own;
    Tree tree;
    Collector collector(shown, source.syntax);
    pb::TextFormat::Parser parser;
    parser.RecordErrorsTo(&collector);
    parser.WriteLocationsTo(&tree);
    parser.SetRecursionLimit(nesting_max);
    pb::io::ArrayInputStream stream(text.data(), static_cast<int>(text.size()));
    if (!parser.Parse(&stream, &own)) return;
    const FieldDescriptor* include = own.GetDescriptor()->FindFieldByName("include");
    for (int i = 0; i < own.include_size(); ++i) {
      const Place place = place_of(tree.GetLocation(include, i), shown);
      if (path == nullptr) {
        source.syntax.push_back({place, "a configuration that is not a file cannot include one"});
      } else {
        file((path->parent_path() / own.include(i)).lexically_normal(), &place);
      }
    }
    own.clear_include();
    if (source.syntax.empty()) merge(own, &tree, shown, source.merged, "");
  }

 private:
  static Place place_of(pb::TextFormat::ParseLocation location, const std::string& shown) {
    return {shown, location.line + 1, location.column + 1};
  }

  void merge(const Message& from, const Tree* tree, const std::string& shown, Message& to, const std::string& path) {
    const pb::Reflection& reflection = *from.GetReflection();
    std::vector<const FieldDescriptor*> fields;
    reflection.ListFields(from, &fields);
    for (const FieldDescriptor* field : fields) {
      const bool message = field->cpp_type() == FieldDescriptor::CPPTYPE_MESSAGE;
      const std::string here = path.empty() ? field->name() : path + "." + field->name();
      if (field->is_repeated() && message) {
        merge_list(from, *field, tree, shown, to, here);
        continue;
      }
      source.places[here] = place_of(tree->GetLocation(field, field->is_repeated() ? 0 : -1), shown);
      if (message) {
        merge(reflection.GetMessage(from, field), tree->GetTreeForNested(field, -1), shown,
              *reflection.MutableMessage(&to, field), here);
      } else {
        copy(from, *field, to);
      }
    }
  }

  void merge_list(const Message& from, const FieldDescriptor& field, const Tree* tree, const std::string& shown,
                  Message& to, const std::string& list) {
    const pb::Reflection& reflection = *from.GetReflection();
    std::map<std::string, int> known;  // entries of earlier files, by name
    for (int i = 0; i < reflection.FieldSize(to, &field); ++i) {
      known.emplace(name_of(reflection.GetRepeatedMessage(to, &field, i)), i);
    }
    std::map<std::string, Place> here;  // entries of this one
    for (int i = 0; i < reflection.FieldSize(from, &field); ++i) {
      const Message& entry = reflection.GetRepeatedMessage(from, &field, i);
      const std::string name = name_of(entry);
      const Place place = place_of(tree->GetLocation(&field, i), shown);
      if (!name.empty()) {
        const auto [first, fresh] = here.emplace(name, place);
        if (!fresh) {
          source.repeated.push_back({place, fmt::format("{} has the name {} twice; it is first used at {}", list,
                                                        in_quotes(name), text_of(first->second))});
          continue;
        }
      }
      const auto earlier = name.empty() ? known.end() : known.find(name);
      const bool fresh = earlier == known.end();
      const int index = fresh ? reflection.FieldSize(to, &field) : earlier->second;
      Message& target =
          fresh ? *reflection.AddMessage(&to, &field) : *reflection.MutableRepeatedMessage(&to, &field, index);
      const std::string path = entry_path(list, entry, index);
      source.places[path] = place;
      merge(entry, tree->GetTreeForNested(&field, i), shown, target, path);
    }
  }

  /// A single field, or a list of numbers as a whole.
  static void copy(const Message& from, const FieldDescriptor& field, Message& to) {
    const pb::Reflection& r = *from.GetReflection();
    if (field.is_repeated()) {
      r.ClearField(&to, &field);
      for (int i = 0; i < r.FieldSize(from, &field); ++i)
        r.AddDouble(&to, &field, r.GetRepeatedDouble(from, &field, i));
      return;
    }
    switch (field.cpp_type()) {
      case FieldDescriptor::CPPTYPE_DOUBLE:
        return r.SetDouble(&to, &field, r.GetDouble(from, &field));
      case FieldDescriptor::CPPTYPE_UINT32:
        return r.SetUInt32(&to, &field, r.GetUInt32(from, &field));
      case FieldDescriptor::CPPTYPE_BOOL:
        return r.SetBool(&to, &field, r.GetBool(from, &field));
      case FieldDescriptor::CPPTYPE_ENUM:
        return r.SetEnumValue(&to, &field, r.GetEnumValue(from, &field));
      default:
        return r.SetString(&to, &field, r.GetString(from, &field));
    }
  }

  std::vector<std::filesystem::path> open_;  ///< the files being read, outermost first
  int files_ = 0;
};

}  // namespace

std::string text_of(const Place& place) { return fmt::format("{}:{}:{}", place.file, place.line, place.column); }

Source read_files(const std::filesystem::path& path) {
  Reader reader;
  reader.source.first.file = path.string();
  reader.file(path, nullptr);
  return std::move(reader.source);
}

Source read_text(std::string_view text, std::string_view name) {
  Reader reader;
  reader.source.first.file = std::string(name);
  if (text.size() > file_bytes_max) {
    reader.source.syntax.push_back(
        {reader.source.first, fmt::format("the text is larger than {} bytes", file_bytes_max)});
  } else {
    reader.parse(text, std::string(name), nullptr);
  }
  return std::move(reader.source);
}

bool is_name(std::string_view text) {
  return !text.empty() && text.size() <= 32 && std::all_of(text.begin(), text.end(), [](char c) {
    return (c >= 'a' && c <= 'z') || (c >= '0' && c <= '9') || c == '_' || c == '-';
  });
}

std::string entry_path(std::string_view list, const Message& entry, int index) {
  const std::string name = name_of(entry);
  return is_name(name) ? fmt::format("{}[{}]", list, name) : fmt::format("{}[#{}]", list, index + 1);
}

std::string in_quotes(std::string_view text) {
  std::string out = "\"";
  for (const char c : text.substr(0, quoted_bytes_max)) {
    const auto byte = static_cast<unsigned char>(c);
    if (c == '"' || c == '\\') out += '\\';
    if (byte < 0x20 || byte == 0x7f) {
      out += fmt::format("\\x{:02x}", byte);
    } else {
      out += c;
    }
  }
  return out + (text.size() > quoted_bytes_max ? "...\"" : "\"");
}

}  // namespace kedge::config
