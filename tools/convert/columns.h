// Reads the columns of one log, keeping the first error: a table is read as a list of columns, and
// asked once at its end whether all went well.
#pragma once

#include <cmath>
#include <cstdint>
#include <string_view>
#include <vector>

#include "core/result.h"
#include "core/time.h"
#include "scoring/csv.h"

namespace kedge::convert {

class Columns {
 public:
  /// `table` must outlive this.
  explicit Columns(const scoring::CsvTable& table) : table_(table) {}

  [[nodiscard]] bool has(std::string_view column) const { return table_.has(column); }
  /// The column `t_s` in nanoseconds.
  std::vector<TimeNs> times_ns();
  std::vector<double> required(std::string_view column);
  /// Empty cells become NaN; the whole is empty where there is no such column.
  std::vector<double> optional(std::string_view column);
  std::vector<std::string_view> texts(std::string_view column);
  std::vector<std::uint32_t> numbers_32(std::string_view column);
  /// Keeps the first.
  void fail(std::string text);

  [[nodiscard]] const Status& status() const { return status_; }

 private:
  const scoring::CsvTable& table_;
  Status status_;
};

/// The value of a row, or NaN where the column is not there.
inline double value_at(const std::vector<double>& column, std::size_t row) {
  return column.empty() ? std::nan("") : column[row];
}

}  // namespace kedge::convert
