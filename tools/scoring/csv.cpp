#include "scoring/csv.h"

#include <fmt/core.h>
#include <fmt/ranges.h>
#include <zlib.h>

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <limits>
#include <memory>

namespace kedge::scoring {

namespace {

std::string_view trimmed(std::string_view text) {
  constexpr std::string_view blanks = " \t\r";
  const std::size_t first = text.find_first_not_of(blanks);
  if (first == std::string_view::npos) return {};
  return text.substr(first, text.find_last_not_of(blanks) - first + 1);
}

// Text from outside as it may stand in an error: short and printable.
std::string shown(std::string_view text) {
  constexpr std::size_t shown_max = 40;
  std::string out;
  for (const char c : text.substr(0, shown_max)) out += c >= ' ' && c <= '~' ? c : '?';
  if (text.size() > shown_max) out += "...";
  return out;
}

template <class Number>
std::optional<Number> parsed(std::string_view text) {
  Number value{};
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
  if (error != std::errc{} || end != text.data() + text.size()) return std::nullopt;
  return value;
}

}  // namespace

Result<CsvTable> CsvTable::read(const std::filesystem::path& path) {
  if (!std::filesystem::is_regular_file(path)) {
    return Error{fmt::format("{}: not a file that can be read; give the path of a CSV file", path.string())};
  }
  const std::unique_ptr<gzFile_s, int (*)(gzFile)> file(gzopen(path.c_str(), "rb"), gzclose);
  if (!file) return Error{fmt::format("{}: cannot be opened for reading", path.string())};
  std::string text;
  std::array<char, 1U << 16U> chunk{};
  for (;;) {
    const int got = gzread(file.get(), chunk.data(), static_cast<unsigned>(chunk.size()));
    int code = Z_OK;
    const char* why = gzerror(file.get(), &code);
    // A gzip file that ends early shows only as an error beside good bytes.
    if (got < 0 || (code != Z_OK && code != Z_STREAM_END)) {
      return Error{fmt::format("{}: damaged after {} bytes of text ({}); fetch the file again", path.string(),
                               text.size(), code == Z_BUF_ERROR ? "the compressed data ends early" : why)};
    }
    if (got == 0) break;
    if (text.size() + static_cast<std::size_t>(got) > bytes_max) {
      return Error{fmt::format("{}: more than {} MiB of text; split the log", path.string(), bytes_max >> 20U)};
    }
    text.append(chunk.data(), static_cast<std::size_t>(got));
  }
  return parse(std::move(text), path.string());
}

Result<CsvTable> CsvTable::parse(std::string text, std::string name) {
  CsvTable table(std::move(name));
  if (text.size() > bytes_max) {
    return Error{fmt::format("{}: more than {} MiB of text; split the log", table.name_, bytes_max >> 20U)};
  }
  table.text_ = std::move(text);
  constexpr std::string_view byte_order_mark = "\xEF\xBB\xBF";
  std::size_t begin = table.text_.starts_with(byte_order_mark) ? byte_order_mark.size() : 0;
  while (begin < table.text_.size()) {
    const std::size_t end = std::min(table.text_.find('\n', begin), table.text_.size());
    ++table.line_;
    const std::string_view line = trimmed(std::string_view(table.text_).substr(begin, end - begin));
    if (!line.empty()) {
      if (line.find('"') != std::string_view::npos) {
        return Error{
            fmt::format("{}:{}: quoted cells are not read; write cells without quotes", table.name_, table.line_)};
      }
      const Status status = table.columns_.empty() ? table.take_header(line) : table.take_row(begin, end);
      if (!status) return Error{status.error()};
    }
    begin = end + 1;
  }
  if (table.columns_.empty()) {
    return Error{fmt::format("{}:1: empty; the first line must name the columns", table.name_)};
  }
  return table;
}

Status CsvTable::take_header(std::string_view line) {
  for (std::size_t begin = 0; begin <= line.size();) {
    const std::size_t end = std::min(line.find(',', begin), line.size());
    const std::string_view column = trimmed(line.substr(begin, end - begin));
    if (column.empty()) {
      return Error{fmt::format("{}:{}: column {} has no name", name_, line_, columns_.size() + 1)};
    }
    if (has(column)) return Error{fmt::format("{}:{}: column '{}' is named twice", name_, line_, shown(column))};
    if (columns_.size() == columns_max) {
      return Error{fmt::format("{}:{}: more than {} columns", name_, line_, columns_max)};
    }
    columns_.emplace_back(column);
    begin = end + 1;
  }
  return {};
}

Status CsvTable::take_row(std::size_t begin, std::size_t end) {
  std::size_t cells = 0;
  for (std::size_t at = begin; at <= end; ++cells) {
    const std::size_t next = std::min(text_.find(',', at), end);
    if (cells < columns_.size()) begins_.push_back(static_cast<std::uint32_t>(at));
    at = next + 1;
  }
  if (cells != columns_.size()) {
    return Error{
        fmt::format("{}:{}: {} cells where the first line names {} columns", name_, line_, cells, columns_.size())};
  }
  lines_.push_back(static_cast<std::uint32_t>(line_));
  return {};
}

std::optional<std::size_t> CsvTable::index_of(std::string_view column) const {
  const auto found = std::find(columns_.begin(), columns_.end(), column);
  if (found == columns_.end()) return std::nullopt;
  return static_cast<std::size_t>(found - columns_.begin());
}

Result<std::size_t> CsvTable::require(std::string_view column) const {
  if (const auto index = index_of(column)) return *index;
  std::vector<std::string> names;
  names.reserve(columns_.size());
  for (const std::string& name : columns_) names.push_back(shown(name));
  return Error{fmt::format("{}:1: no column '{}'; there are {}", name_, column, fmt::join(names, ", "))};
}

std::string_view CsvTable::cell(std::size_t row, std::size_t column) const {
  const std::size_t begin = begins_[row * columns_.size() + column];
  const std::size_t end = text_.find_first_of(",\n", begin);
  return trimmed(std::string_view(text_).substr(begin, end == std::string::npos ? end : end - begin));
}

std::string CsvTable::place(std::size_t row) const { return fmt::format("{}:{}", name_, lines_.at(row)); }

Result<std::vector<double>> CsvTable::numbers(std::string_view column, Empty empty) const {
  const auto index = require(column);
  if (!index) return Error{index.error()};
  std::vector<double> values;
  values.reserve(rows());
  for (std::size_t row = 0; row < rows(); ++row) {
    const std::string_view text = cell(row, *index);
    if (text.empty() && empty == Empty::as_nan) {
      values.push_back(std::numeric_limits<double>::quiet_NaN());
      continue;
    }
    const bool plus = text.starts_with('+') && !text.starts_with("+-");  // which from_chars does not know
    const auto value = parsed<double>(plus ? text.substr(1) : text);
    if (!value || !std::isfinite(*value)) {
      return Error{
          fmt::format("{}: column '{}' holds '{}' where a finite number is wanted", place(row), column, shown(text))};
    }
    values.push_back(*value);
  }
  return values;
}

Result<std::vector<std::uint64_t>> CsvTable::counts(std::string_view column) const {
  const auto index = require(column);
  if (!index) return Error{index.error()};
  std::vector<std::uint64_t> values;
  values.reserve(rows());
  for (std::size_t row = 0; row < rows(); ++row) {
    const std::string_view text = cell(row, *index);
    const auto value = parsed<std::uint64_t>(text);
    if (!value) {
      return Error{fmt::format("{}: column '{}' holds '{}' where a whole number from 0 is wanted", place(row), column,
                               shown(text))};
    }
    values.push_back(*value);
  }
  return values;
}

Result<std::vector<std::string_view>> CsvTable::texts(std::string_view column) const {
  const auto index = require(column);
  if (!index) return Error{index.error()};
  std::vector<std::string_view> values;
  values.reserve(rows());
  for (std::size_t row = 0; row < rows(); ++row) values.push_back(cell(row, *index));
  return values;
}

}  // namespace kedge::scoring
