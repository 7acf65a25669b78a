#include "scoring/truth.h"

#include <fmt/core.h>

#include <algorithm>

#include "core/assert.h"

namespace kedge::scoring {

void Track::add(double t_s, const Vector3& position_m, const std::optional<Vector2>& velocity_mps, bool ok) {
  KEDGE_ASSERT(rows_.empty() || t_s > rows_.back().t_s);
  rows_.push_back({t_s, position_m, velocity_mps, ok});
}

std::optional<Track::Between> Track::find(double t_s) const {
  const auto after =
      std::lower_bound(rows_.begin(), rows_.end(), t_s, [](const Row& row, double time_s) { return row.t_s < time_s; });
  if (after == rows_.end()) return std::nullopt;
  if (after->t_s == t_s) return after->ok ? std::optional<Between>({&*after, &*after, 0.0}) : std::nullopt;
  if (after == rows_.begin()) return std::nullopt;
  const Row& before = *std::prev(after);
  const double gap_s = after->t_s - before.t_s;
  if (gap_s > gap_max_s || !before.ok || !after->ok) return std::nullopt;
  return Between{&before, &*after, (t_s - before.t_s) / gap_s};
}

std::optional<TruthPoint> Track::at(double t_s) const {
  const auto here = find(t_s);
  if (!here) return std::nullopt;
  const auto mixed = [](const Between& b, const auto& from, const auto& to) {
    return ((1.0 - b.share) * from + b.share * to).eval();
  };
  const auto position_m = [&mixed](const Between& b) { return mixed(b, b.before->position_m, b.after->position_m); };
  TruthPoint point;
  point.position_m = position_m(*here);
  if (here->before->velocity_mps && here->after->velocity_mps) {
    point.velocity_mps = mixed(*here, *here->before->velocity_mps, *here->after->velocity_mps);
    return point;
  }
  constexpr double half_s = 0.1;
  const auto earlier = find(t_s - half_s);
  const auto later = find(t_s + half_s);
  if (!earlier || !later) return std::nullopt;
  point.velocity_mps = (position_m(*later) - position_m(*earlier)).head<2>() / (2.0 * half_s);
  return point;
}

Result<TruthFile> TruthFile::read(const std::filesystem::path& path) {
  auto table = CsvTable::read(path);
  if (!table) return Error{table.error()};
  return TruthFile(*std::move(table));
}

Result<std::vector<std::string>> TruthFile::tags() const {
  std::vector<std::string> names;
  if (!table_.has("tag")) return names;
  const auto cells = table_.texts("tag");
  if (!cells) return Error{cells.error()};
  for (const std::string_view cell : *cells) {
    if (std::find(names.begin(), names.end(), cell) == names.end()) names.emplace_back(cell);
  }
  return names;
}

std::string TruthFile::position_prefix(const std::string& tag) const {
  for (const std::string& prefix : {tag + "_", std::string("tag_")}) {
    if (table_.has(prefix + "x_m")) return prefix;
  }
  return "";
}

Result<Track> TruthFile::track(const std::string& tag, double offset_s) const {
  const std::string prefix = position_prefix(tag);
  std::vector<std::vector<double>> columns;
  for (const std::string& name : {std::string("t_s"), prefix + "x_m", prefix + "y_m"}) {
    auto values = table_.numbers(name);
    if (!values) return Error{values.error()};
    columns.push_back(*std::move(values));
  }
  // What a file may lack; `optional` stays empty then.
  std::vector<std::vector<double>> optional;
  for (const std::string& name : {prefix + "z_m", std::string("vx_mps"), std::string("vy_mps"), std::string("ok")}) {
    optional.emplace_back();
    if (!table_.has(name)) continue;
    auto values = table_.numbers(name);
    if (!values) return Error{values.error()};
    optional.back() = *std::move(values);
  }
  std::vector<std::string_view> names;
  if (table_.has("tag")) {
    auto cells = table_.texts("tag");
    if (!cells) return Error{cells.error()};
    names = *std::move(cells);
  }
  const auto& [z_m, vx_mps, vy_mps, ok] = std::tie(optional[0], optional[1], optional[2], optional[3]);
  Track track;
  for (std::size_t row = 0; row < table_.rows(); ++row) {
    if (!names.empty() && names[row] != tag) continue;
    const double t_s = columns[0][row] + offset_s;
    if (track.size() > 0 && t_s <= track.end_s()) {
      return Error{fmt::format("{}: t_s {} does not lie after {}; rows must be in order of time", table_.place(row),
                               columns[0][row], track.end_s() - offset_s)};
    }
    std::optional<Vector2> velocity_mps;
    if (!vx_mps.empty() && !vy_mps.empty()) velocity_mps = Vector2(vx_mps[row], vy_mps[row]);
    const Vector3 position_m(columns[1][row], columns[2][row], z_m.empty() ? 0.0 : z_m[row]);
    track.add(t_s, position_m, velocity_mps, ok.empty() || ok[row] != 0.0);
  }
  if (track.size() == 0) return Error{fmt::format("no truth for tag '{}'", tag)};
  return track;
}

}  // namespace kedge::scoring
