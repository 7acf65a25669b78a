// Writes one CSV file, made when its first row comes.
#pragma once

#include <cstdint>
#include <filesystem>
#include <fstream>
#include <optional>
#include <string>
#include <string_view>

#include "core/result.h"
#include "core/time.h"

namespace kedge::convert {

/// Seconds with at least six digits after the point and as many as nanoseconds need.
[[nodiscard]] std::string time_text(TimeNs time_ns);

class TableWriter {
 public:
  /// `columns` is the first line.
  TableWriter(std::filesystem::path path, std::string columns) : path_(std::move(path)), columns_(std::move(columns)) {}

  /// Cells of the current row, in the order of the columns.
  void cell(std::string_view text);
  void time(TimeNs time_ns) { cell(time_text(time_ns)); }
  void number(double value);
  void number(float value);
  void count(std::uint64_t value);
  void count(std::int64_t value);
  void empty() { cell(""); }
  /// Ends the row.
  void end_row();

  [[nodiscard]] std::uint64_t rows() const { return rows_; }
  [[nodiscard]] const std::filesystem::path& path() const { return path_; }
  /// Fails when the file could not be made or written; without rows there is no file.
  [[nodiscard]] Status close();

 private:
  std::filesystem::path path_;
  std::string columns_;
  std::string row_;
  bool begun_ = false;  // a cell of this row was written
  std::uint64_t rows_ = 0;
  std::ofstream out_;
};

/// The folder to write tables to: makes it, and refuses one that already holds any of `names`.
[[nodiscard]] Status prepare_folder(const std::filesystem::path& folder, std::initializer_list<const char*> names);

}  // namespace kedge::convert
