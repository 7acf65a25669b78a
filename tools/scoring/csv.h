// Tables of numbers with a line of column names: truth, ranges, inertial logs.
//
// Comma-separated, plain or gzip, lines ending in LF or CRLF, no quoting. Sizes are never trusted: a
// file is read up to a limit, compressed or not, and every row must have a cell for each column.
// Errors read "FILE:LINE: what is wrong and what would be right".
#pragma once

#include <cstddef>
#include <cstdint>
#include <filesystem>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "core/result.h"

namespace kedge::scoring {

class CsvTable {
 public:
  /// After decompression. A day of inertial data at 100 Hz takes about 800 MB; split longer logs.
  static constexpr std::size_t bytes_max = std::size_t{1} << 30U;
  static constexpr std::size_t columns_max = 256;

  [[nodiscard]] static Result<CsvTable> read(const std::filesystem::path& path);
  /// The same for text at hand; `name` stands for the file in errors.
  [[nodiscard]] static Result<CsvTable> parse(std::string text, std::string name);

  [[nodiscard]] std::size_t rows() const { return lines_.size(); }
  [[nodiscard]] const std::vector<std::string>& columns() const { return columns_; }
  [[nodiscard]] bool has(std::string_view column) const { return index_of(column).has_value(); }

  enum class Empty : std::uint8_t { refused, as_nan };
  /// A whole column of finite numbers. Fails when there is no such column, and at the first cell that
  /// is no number.
  [[nodiscard]] Result<std::vector<double>> numbers(std::string_view column, Empty empty = Empty::refused) const;
  /// A column of whole numbers: counters and names of devices.
  [[nodiscard]] Result<std::vector<std::uint64_t>> counts(std::string_view column) const;
  /// A column as it stands, spaces at the ends taken off. The views live as long as the table.
  [[nodiscard]] Result<std::vector<std::string_view>> texts(std::string_view column) const;

  /// "FILE:LINE" of a row, for errors of meaning.
  [[nodiscard]] std::string place(std::size_t row) const;

 private:
  explicit CsvTable(std::string name) : name_(std::move(name)) {}

  Status take_header(std::string_view line);
  Status take_row(std::size_t begin, std::size_t end);
  [[nodiscard]] std::optional<std::size_t> index_of(std::string_view column) const;
  [[nodiscard]] Result<std::size_t> require(std::string_view column) const;
  [[nodiscard]] std::string_view cell(std::size_t row, std::size_t column) const;

  std::string name_;
  std::string text_;
  std::size_t line_ = 0;
  std::vector<std::string> columns_;
  std::vector<std::uint32_t> lines_;   ///< line number of each row
  std::vector<std::uint32_t> begins_;  ///< offset of each cell in the text; a cell ends at a comma or line end
};

}  // namespace kedge::scoring
