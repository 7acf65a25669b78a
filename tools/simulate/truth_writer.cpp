#include "simulate/truth_writer.h"

#include <fmt/core.h>

#include <algorithm>

#include "recording/new_file.h"

namespace kedge::simulate {

namespace {
constexpr TimeNs step_ns = 50 * ns_per_ms;
}

TruthWriter::TruthWriter(const std::vector<simulation::ScenarioSpec>& specs)
    : next_ns_(specs.front().start_ns), end_ns_(specs.front().start_ns) {
  for (const simulation::ScenarioSpec& spec : specs) {
    names_.push_back(spec.name);
    vehicles_.emplace_back(spec);
    end_ns_ = std::max(end_ns_, spec.start_ns + from_seconds(spec.duration_s));
  }
}

Status TruthWriter::open(const std::string& path) {
  if (path.empty()) return {};
  if (Status fresh = recording::check_new(path); !fresh) return fresh;
  path_ = path;
  out_.open(path, std::ios::trunc);
  if (!out_) return Error{fmt::format("{}: cannot be written; is the folder there?", path)};
  out_ << "tag,t_s,x_m,y_m,z_m,qw,qx,qy,qz,vx_mps,vy_mps,vz_mps,heading_rad\n";
  return {};
}

void TruthWriter::advance(TimeNs now_ns) {
  if (path_.empty()) return;
  for (; next_ns_ <= std::min(now_ns, end_ns_); next_ns_ += step_ns) write_rows(next_ns_);
}

void TruthWriter::write_rows(TimeNs time_ns) {
  for (std::size_t i = 0; i < vehicles_.size(); ++i) {
    const simulation::Truth t = vehicles_[i].at(time_ns);
    const Vector3& p = t.position_m;
    const Vector3& v = t.velocity_mps;
    const Quaternion& q = t.q_body_to_site;
    out_ << fmt::format("{},{}.{:09},{},{},{},{},{},{},{},{},{},{},{}\n", names_[i], time_ns / ns_per_s,
                        time_ns % ns_per_s, p.x(), p.y(), p.z(), q.w(), q.x(), q.y(), q.z(), v.x(), v.y(), v.z(),
                        t.heading_rad());
  }
}

Status TruthWriter::close() {
  if (path_.empty()) return {};
  out_.close();
  if (!out_) return Error{fmt::format("{}: not written completely; is the disk full?", path_)};
  return {};
}

}  // namespace kedge::simulate
