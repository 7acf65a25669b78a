#include "convert/table_writer.h"

#include <fmt/core.h>

#include <algorithm>
#include <cmath>
#include <system_error>

namespace kedge::convert {

std::string time_text(TimeNs time_ns) {
  const auto magnitude = time_ns < 0 ? ~static_cast<std::uint64_t>(time_ns) + 1 : static_cast<std::uint64_t>(time_ns);
  constexpr auto second = static_cast<std::uint64_t>(ns_per_s);
  std::string text = fmt::format("{}{}.{:09}", time_ns < 0 ? "-" : "", magnitude / second, magnitude % second);
  constexpr std::size_t spare_digits = 3;  // those after microseconds
  for (std::size_t i = 0; i < spare_digits && text.back() == '0'; ++i) text.pop_back();
  return text;
}

void TableWriter::cell(std::string_view text) {
  if (begun_) row_ += ',';
  begun_ = true;
  // Names from a damaged or foreign file must not break the table.
  std::transform(text.begin(), text.end(), std::back_inserter(row_),
                 [](char c) { return c == ',' || c == '"' || c == '\n' || c == '\r' ? '_' : c; });
}

void TableWriter::number(double value) { cell(std::isnan(value) ? std::string() : fmt::format("{}", value)); }
void TableWriter::number(float value) { cell(std::isnan(value) ? std::string() : fmt::format("{}", value)); }
void TableWriter::count(std::uint64_t value) { cell(fmt::format("{}", value)); }
void TableWriter::count(std::int64_t value) { cell(fmt::format("{}", value)); }

void TableWriter::end_row() {
  if (rows_++ == 0) {
    out_.open(path_, std::ios::binary);
    out_ << columns_ << '\n';
  }
  row_ += '\n';
  out_ << row_;
  row_.clear();
  begun_ = false;
}

Status TableWriter::close() {
  if (rows_ == 0) return {};
  out_.close();
  if (out_.fail()) return Error{fmt::format("{}: could not be written; is the disk full?", path_.string())};
  return {};
}

Status prepare_folder(const std::filesystem::path& folder, std::initializer_list<const char*> names) {
  std::error_code error;
  std::filesystem::create_directories(folder, error);
  if (error) return Error{fmt::format("making the folder {}: {}", folder.string(), error.message())};
  for (const char* name : names) {
    if (!std::filesystem::exists(folder / name)) continue;
    return Error{fmt::format("{} exists: tables are never overwritten; give another folder or remove it",
                             (folder / name).string())};
  }
  return {};
}

}  // namespace kedge::convert
