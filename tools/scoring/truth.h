// Where the tags really were, to measure estimates against.
//
// Columns: t_s, x_m, y_m and, where known, z_m, vx_mps, vy_mps, ok (0: do not trust this row) and tag
// (several tags in one file, each with rows of its own). Columns NAME_x_m, NAME_y_m, NAME_z_m are the
// positions of the antenna of tag NAME, those named tag_ of the only one; they go before x_m.
#pragma once

#include <filesystem>
#include <optional>
#include <string>
#include <vector>

#include "core/result.h"
#include "core/rotation.h"
#include "scoring/csv.h"

namespace kedge::scoring {

struct TruthPoint {
  Vector3 position_m = Vector3::Zero();  ///< site axes; z is 0 where the file has none
  Vector2 velocity_mps = Vector2::Zero();
};

/// One tag's path, interpolated linearly between rows.
class Track {
 public:
  /// Rows further apart than this hide what happened between them.
  static constexpr double gap_max_s = 1.0;

  /// Takes rows in order of time.
  void add(double t_s, const Vector3& position_m, const std::optional<Vector2>& velocity_mps, bool ok);
  [[nodiscard]] std::size_t size() const { return rows_.size(); }
  [[nodiscard]] double begin_s() const { return rows_.front().t_s; }
  [[nodiscard]] double end_s() const { return rows_.back().t_s; }

  /// Nothing outside the rows, in gaps and beside rows that are not to be trusted. A velocity the file
  /// does not have is the difference of positions 0.1 s before and after.
  [[nodiscard]] std::optional<TruthPoint> at(double t_s) const;

 private:
  struct Row {
    double t_s = 0.0;
    Vector3 position_m = Vector3::Zero();
    std::optional<Vector2> velocity_mps;
    bool ok = true;
  };
  struct Between {
    const Row* before;
    const Row* after;
    double share;
  };
  [[nodiscard]] std::optional<Between> find(double t_s) const;

  std::vector<Row> rows_;
};

class TruthFile {
 public:
  [[nodiscard]] static Result<TruthFile> read(const std::filesystem::path& path);
  explicit TruthFile(CsvTable table) : table_(std::move(table)) {}

  /// Names in the column `tag`, in order of appearance; empty when there is no such column.
  [[nodiscard]] Result<std::vector<std::string>> tags() const;

  /// The path of one tag; `offset_s` is added to the file's times. Fails when there is none and when
  /// times do not rise.
  [[nodiscard]] Result<Track> track(const std::string& tag, double offset_s = 0.0) const;

 private:
  [[nodiscard]] std::string position_prefix(const std::string& tag) const;

  CsvTable table_;
};

}  // namespace kedge::scoring
