#include "evaluate/report.h"

#include <fmt/core.h>

namespace kedge::evaluate {

namespace {

std::string json_text(const std::string& text) {
  std::string out = "\"";
  for (const char c : text) {
    const auto byte = static_cast<unsigned char>(c);
    if (c == '"' || c == '\\') {
      out += '\\';
      out += c;
    } else if (byte < 0x20) {
      out += fmt::format("\\u{:04x}", byte);
    } else {
      out += c;
    }
  }
  return out + '"';
}

// A figure, or what stands for one that is not known.
std::string figure(bool known, double value, int digits, const char* unknown) {
  return known ? fmt::format("{:.{}f}", value, digits) : std::string(unknown);
}

}  // namespace

std::string table(const std::vector<TagFigures>& rows) {
  std::string out = fmt::format("{:<12}{:>9}{:>7}{:>9}{:>9}{:>9}{:>9}{:>10}{:>8}{:>9}{:>10}{:>9}{:>9}  {}\n", "tag",
                                "messages", "avail", "mean m", "RMS m", "50 % m", "95 % m", "speed m/s", "in 95 %",
                                "NEES", "settled s", "wrong", "twofold", "standing");
  for (const TagFigures& row : rows) {
    const scoring::Figures& f = row.figures;
    const bool known = f.positions > 0;
    out += fmt::format(
        "{:<12}{:>9}{:>7.3f}{:>9}{:>9}{:>9}{:>9}{:>10}{:>8}{:>9}{:>10}{:>9.4f}{:>9.3f}  {}\n", row.tag, row.messages,
        f.available, figure(known, f.position_mean_m, 3, "-"), figure(known, f.position_rms_m, 3, "-"),
        figure(known, f.position_p50_m, 3, "-"), figure(known, f.position_p95_m, 3, "-"),
        figure(f.speed_rms_mps.has_value(), f.speed_rms_mps.value_or(0.0), 3, "-"), figure(known, f.inside_95, 3, "-"),
        figure(known, f.nees, 2, "-"), figure(f.settled_after_s.has_value(), f.settled_after_s.value_or(0.0), 1, "-"),
        f.confidently_wrong, f.twofold, feed::v1::Standing::Value_Name(f.standing));
  }
  return out;
}

std::string json_lines(const std::vector<TagFigures>& rows) {
  std::string out;
  for (const TagFigures& row : rows) {
    const scoring::Figures& f = row.figures;
    const bool known = f.positions > 0;
    out += fmt::format(
        R"({{"tag":{},"messages":{},"scored":{},"available":{:.4f},"position_mean_m":{},"position_rms_m":{},)"
        R"("position_p50_m":{},"position_p95_m":{},"speed_rms_mps":{},"inside_95":{},"nees":{},"settled_after_s":{},)"
        R"("confidently_wrong":{:.5f},"twofold":{:.4f},"settled":{:.4f},"standing":"{}"}})"
        "\n",
        json_text(row.tag), row.messages, f.samples, f.available, figure(known, f.position_mean_m, 4, "null"),
        figure(known, f.position_rms_m, 4, "null"), figure(known, f.position_p50_m, 4, "null"),
        figure(known, f.position_p95_m, 4, "null"),
        figure(f.speed_rms_mps.has_value(), f.speed_rms_mps.value_or(0.0), 4, "null"),
        figure(known, f.inside_95, 4, "null"), figure(known, f.nees, 3, "null"),
        figure(f.settled_after_s.has_value(), f.settled_after_s.value_or(0.0), 2, "null"), f.confidently_wrong,
        f.twofold, f.settled, feed::v1::Standing::Value_Name(f.standing));
  }
  return out;
}

}  // namespace kedge::evaluate
