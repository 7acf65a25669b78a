// kedge-convert as people run it: logs to a capture and back, and what it says to logs that are wrong.
#include <fmt/core.h>
#include <unistd.h>
#include <zlib.h>

#include <catch2/catch.hpp>
#include <cmath>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <sstream>

#include "capture/capture_reader.h"
#include "capture/file_source.h"
#include "proto/station.pb.h"
#include "scoring/csv.h"
#include "support/program.h"
#include "support/temporary_folder.h"

using namespace kedge;
using scoring::CsvTable;
namespace fs = std::filesystem;

namespace {

class Folder : public kedge::test::TemporaryFolder {
 public:
  /// Output with this folder's own name taken out.
  [[nodiscard]] std::string without_path(std::string text) const {
    for (std::size_t at = 0; (at = text.find(path().string() + "/")) != std::string::npos;) {
      text.erase(at, path().string().size() + 1);
    }
    return text;
  }
};

using test::Run;

Run convert(const std::string& arguments) { return test::run_program("tools/kedge-convert", arguments); }

std::string read_text(const fs::path& path) {
  std::ifstream file(path, std::ios::binary);
  return {std::istreambuf_iterator<char>(file), std::istreambuf_iterator<char>()};
}

const char* const anchors_csv = "anchor,x_m,y_m,z_m\n4,1.5,-2.25,2\n5,0,0,3\n";
const char* const ranges_csv =
    "t_s,tag,anchor,range_m,sigma_m,rssi_dbm,rssi_fp_dbm\n"
    "0.100000,1,4,3.25,0.1,-80.5,-82.25\n"
    "0.150000,2,5,4.125,,,\n"
    "0.250000,1,5,2.5,,-79,\n";
const char* const inertial_csv =
    "t_s,gx,gy,gz,ax,ay,az,mx,my,mz,pressure_pa\n"
    "0.050000,0.01,-0.02,0.03,0.1,-0.2,9.8,20.5,-3.25,40,101325\n"
    "0.100000,0.04,0.05,-0.06,0.3,0.4,9.7,,,,\n";

/// Rows of the original, each as the copy has it: same columns, same numbers as float; by time, tag and anchor.
void check_same_numbers(const CsvTable& original, const CsvTable& copy, const std::vector<std::string>& columns,
                        const std::vector<std::size_t>& order) {
  REQUIRE(copy.rows() == order.size());
  for (const std::string& column : columns) {
    const auto a = original.numbers(column, CsvTable::Empty::as_nan);
    const auto b = copy.numbers(column, CsvTable::Empty::as_nan);
    INFO(column);
    REQUIRE(a);
    REQUIRE(b);
    std::size_t differ = 0;
    for (std::size_t row = 0; row < order.size(); ++row) {
      const double was = (*a)[order[row]];
      const double is = (*b)[row];
      const bool same = std::isnan(was)   ? std::isnan(is)
                        : column == "t_s" ? was == is
                                          : static_cast<float>(was) == static_cast<float>(is);
      if (!same) ++differ;
    }
    CHECK(differ == 0);
  }
}

std::vector<std::size_t> by_time(const CsvTable& table) {
  const auto times = table.numbers("t_s");
  REQUIRE(times);
  std::vector<std::size_t> order(table.rows());
  for (std::size_t i = 0; i < order.size(); ++i) order[i] = i;
  std::stable_sort(order.begin(), order.end(), [&](std::size_t a, std::size_t b) { return (*times)[a] < (*times)[b]; });
  return order;
}

CsvTable table_of(const fs::path& path) {
  Result<CsvTable> table = CsvTable::read(path);
  INFO((table ? "" : table.error()));
  REQUIRE(table);
  return *std::move(table);
}

}  // namespace

TEST_CASE("logs become a capture and come back") {
  const Folder folder;
  folder.write("logs/anchors.csv", anchors_csv);
  folder.write("logs/ranges.csv", ranges_csv);
  folder.write("logs/inertial.csv", inertial_csv);
  folder.write("logs/odometry.csv", "t_s,tag,dist_m,dheading_rad\n0.1,1,0.5,0.25\n0.2,1,0.75,-0.5\n");
  const std::string capture = (folder / "c.pcapng").string();
  Run run = convert((folder / "logs").string() + " " + capture);
  CHECK(run.output == "9 packets of 2 tags\n");  // 3 ranges, 2 x 2 inertial, 2 travel
  REQUIRE(run.exit_code == 0);
  run = convert(capture + " " + (folder / "back").string());
  REQUIRE(run.exit_code == 0);

  CHECK(read_text(folder / "back/ranges.csv") ==
        "t_s,tag,anchor,range_m,sigma_m,rssi_dbm,rssi_fp_dbm,tx1_tick,rx1_tick,tx2_tick,rx2_tick,tx3_tick,rx3_tick,"
        "counter_bits,device_time_us\n"
        "0.100000,1,4,3.25,0.1,-80.5,-82.25,,,,,,,,1000100000\n"
        "0.150000,2,5,4.125,,,,,,,,,,,1000150000\n"
        "0.250000,1,5,2.5,,-79,,,,,,,,,1000250000\n");
  // Both tags of the rig have its inertial unit.
  CHECK(read_text(folder / "back/inertial.csv") ==
        "t_s,tag,gx,gy,gz,ax,ay,az,mx,my,mz,pressure_pa,temperature_degc,battery_v,device_time_us\n"
        "0.050000,1,0.01,-0.02,0.03,0.1,-0.2,9.8,20.5,-3.25,40,101325,,,1000050000\n"
        "0.050000,2,0.01,-0.02,0.03,0.1,-0.2,9.8,20.5,-3.25,40,101325,,,1000050000\n"
        "0.100000,1,0.04,0.05,-0.06,0.3,0.4,9.7,,,,,,,1000100000\n"
        "0.100000,2,0.04,0.05,-0.06,0.3,0.4,9.7,,,,,,,1000100000\n");
  CHECK(read_text(folder / "back/odometry.csv") ==
        "t_s,tag,interval_s,dist_m,dheading_rad,device_time_us\n"
        "0.100000,1,0.100000,0.5,0.25,1000100000\n"
        "0.200000,1,0.100000,0.75,-0.5,1000200000\n");
  CHECK(read_text(folder / "back/anchors.csv") == anchors_csv);

  // And round again: the tables make the same packets.
  REQUIRE(convert((folder / "back").string() + " " + (folder / "d.pcapng").string()).exit_code == 0);
  REQUIRE(convert((folder / "d.pcapng").string() + " " + (folder / "again").string()).exit_code == 0);
  for (const char* name : {"ranges.csv", "inertial.csv", "odometry.csv", "anchors.csv"}) {
    CHECK(read_text(folder / (std::string("again/") + name)) == read_text(folder / (std::string("back/") + name)));
  }
}

TEST_CASE("the capture has a station's own records, in order, and packets at their times") {
  const Folder folder;
  folder.write("logs/anchors.csv", anchors_csv);
  folder.write("logs/ranges.csv", "t_s,tag,anchor,range_m\n0.2,1,4,3\n-0.05,1,4,2\n");
  const Run run = convert((folder / "logs").string() + " " + (folder / "c.pcapng").string());
  REQUIRE(run.exit_code == 0);
  // A station refuses what is before its own beginning.
  CHECK(
      run.output ==
      "2 packets of 1 tags\ntimes of the logs begin below 0, those of a station never do: 1 s was added to all; truth "
      "with the times of the logs needs kedge-evaluate --truth-offset 1\n");
  capture::FileSource source;
  REQUIRE(source.open(folder / "c.pcapng"));
  auto reader = capture::CaptureReader::open(source);
  REQUIRE(reader);
  std::vector<std::string> seen;
  capture::Arrival arrival;
  while (reader->next(arrival) == capture::Next::record) {
    const RawRecord& record = arrival.record;
    std::string what = "packet";
    if (record.source == station_source) {
      station::v1::StationRecord station;
      REQUIRE(station.ParseFromArray(record.bytes.data(), static_cast<int>(record.bytes.size())));
      what = station.has_tick() ? "tick" : station.has_utc_offset() ? "utc" : station.has_link_state() ? "link" : "?";
    }
    seen.push_back(fmt::format("{} {} {}", record.time_ns, record.sequence, what));
  }
  CHECK(seen == std::vector<std::string>{"950000000 0 utc", "950000000 1 link", "950000000 0 packet",
                                         "1000000000 2 tick", "1100000000 3 tick", "1200000000 4 tick",
                                         "1200000000 1 packet", "1300000000 5 tick"});
}

TEST_CASE("options go into the configuration") {
  const Folder folder;
  folder.write("logs/anchors.csv", anchors_csv);
  folder.write("logs/ranges.csv", ranges_csv);
  const Run run =
      convert((folder / "logs").string() + " " + (folder / "c.pcapng").string() + " --config-out " +
              (folder / "c.txtpb").string() +
              " --profile flyer --method plain --anchors 4 --tags 1 --mounting-roll 180 --mounting-pitch=-8.5"
              " --mounting-yaw 0.5 --antenna=-0.064,-0.081,0.101 --height 1.5 --start 1,2,0.5,90,5"
              " --range-lag 0.1 --range-sigma 0.2");
  CHECK(run.output == "1 packets of 1 tags\n");
  REQUIRE(run.exit_code == 0);
  const std::string text = read_text(folder / "c.txtpb");
  for (const char* line :
       {"profile: flyer", "method: plain", "anchor_id: 4", "name: \"tag1\"", "device_id: 1", "roll_deg: 180",
        "pitch_deg: -8.5", "yaw_deg: 0.5", "antenna_forward_m: -0.064", "antenna_left_m: -0.081", "antenna_up_m: 0.101",
        "antenna_height_m: 1.5", "position_sigma_m: 0.5", "heading_deg: 90", "heading_sigma_deg: 5", "range_lag_s: 0.1",
        "range_sigma_m: 0.2"}) {
    INFO(line);
    CHECK(text.find(line) != std::string::npos);
  }
  CHECK(text.find("anchor_id: 5") == std::string::npos);
  CHECK(text.find("tag2") == std::string::npos);

  capture::FileSource source;
  REQUIRE(source.open(folder / "c.pcapng"));
  const auto reader = capture::CaptureReader::open(source);
  REQUIRE(reader);
  CHECK(reader->head().configuration == text);
  CHECK(reader->head().program == "kedge-convert");
}

TEST_CASE("bad logs and command lines are refused with place and remedy") {
  const Folder folder;
  folder.write("logs/anchors.csv", anchors_csv);
  folder.write("logs/ranges.csv", ranges_csv);
  const auto refusal = [&](const std::string& name, const std::string& text, const std::string& options = "") {
    const std::string before = read_text(folder / ("logs/" + name));
    folder.write("logs/" + name, text);
    const Run run = convert((folder / "logs").string() + " " + (folder / "c.pcapng").string() + " " + options);
    CHECK(run.exit_code == 2);
    CHECK_FALSE(fs::exists(folder / "c.pcapng"));
    if (before.empty()) {
      fs::remove(folder / ("logs/" + name));
    } else {
      folder.write("logs/" + name, before);
    }
    return folder.without_path(run.output);
  };
  const auto with = [&](const std::string& options) { return refusal("ranges.csv", ranges_csv, options); };

  CHECK(refusal("ranges.csv", "t_s,tag,anchor\n0,1,4\n") ==
        "kedge-convert: logs/ranges.csv:1: no column 'range_m'; there are t_s, tag, anchor\n");
  CHECK(refusal("ranges.csv", "t_s,tag,anchor,range_m\n0,1,4,2\n0,1,9,2\n") ==
        "kedge-convert: logs/ranges.csv:3: anchor 9 is not in anchors.csv; there are 4, 5\n");
  CHECK(refusal("ranges.csv", "t_s,tag,anchor,range_m\n0,1,4,2\n1,1,4,near\n") ==
        "kedge-convert: logs/ranges.csv:3: column 'range_m' holds 'near' where a finite number is wanted\n");
  CHECK(refusal("ranges.csv", "t_s,tag,anchor,range_m\n0,1,4,2\n1e12,1,4,2\n") ==
        "kedge-convert: logs/ranges.csv:3: column 't_s' holds 1e+12 s; times must be within +-4e+09 s\n");
  CHECK(
      refusal("ranges.csv", "t_s,tag,anchor,range_m\n0,1,4,2\n100000,1,4,2\n") ==
      "kedge-convert: logs/ranges.csv:3: column 't_s' is 100000 s after the row before it (logs/ranges.csv:2); at most "
      "3600 s are taken: split the log\n");
  CHECK(refusal("ranges.csv",
                "t_s,tag,anchor,range_m,tx1_tick,rx1_tick,tx2_tick,rx2_tick,tx3_tick,rx3_tick\n"
                "0,1,4,2,1,2,3,4,5,x\n") ==
        "kedge-convert: logs/ranges.csv:2: column 'rx3_tick' must hold a whole number of ticks, or all six counters be "
        "empty\n");
  CHECK(refusal("ranges.csv",
                "t_s,tag,anchor,range_m,tx1_tick,rx1_tick,tx2_tick,rx2_tick,tx3_tick,rx3_tick\n"
                "0,1,4,,,,,,,\n") == "kedge-convert: logs/ranges.csv:2: neither range_m nor counters\n");
  CHECK(refusal("ranges.csv", "t_s,tag,anchor,range_m\n") == "kedge-convert: logs: no rows to convert\n");
  CHECK(refusal("ranges.csv", "t_s,tag,anchor,range_m\n0,Cart,4,2\n") ==
        "kedge-convert: logs/ranges.csv:2: column 'tag' holds \"Cart\"; a tag is a number or a name of 1 to 32 of a to "
        "z, 0 to "
        "9, '_' and '-'\n");
  CHECK(refusal("inertial.csv", "t_s,gx,gy,gz,ax,ay,az,mx\n0,0,0,0,0,0,9.8,1\n") ==
        "kedge-convert: logs/inertial.csv:1: no column 'my'; there are t_s, gx, gy, gz, ax, ay, az, mx\n");
  CHECK(refusal("odometry.csv", "t_s,speed\n0,1\n") ==
        "kedge-convert: logs/odometry.csv:1: no column 'dist_m'; there are t_s, speed\n");
  CHECK(refusal("odometry.csv", "t_s,dist_m\n1,1\n1,1\n") ==
        "kedge-convert: logs/odometry.csv:3: column 't_s' does not rise from logs/odometry.csv:2\n");
  CHECK(refusal("odometry.csv", "t_s,dist_m\n1,1\n") ==
        "kedge-convert: logs/odometry.csv:2: the only row of its tag says nothing of its interval; add a column "
        "interval_s\n");
  CHECK(refusal("ranges.csv.gz", "x\n") ==
        "kedge-convert: logs/ranges.csv and logs/ranges.csv.gz are both there; remove the one that is not meant\n");
  CHECK(with("--anchors 7") == "kedge-convert: --anchors: no anchor 7 in anchors.csv; there are 4, 5\n");
  CHECK(with("--tags 3") == "kedge-convert: --tags: no tag 3 in the logs; there are 1, 2\n");
  CHECK(with("--start 1,2,3,4") == "kedge-convert: --start: a heading needs its sigma: E,N,SIGMA,HEADING,SIGMA\n");
  CHECK(with("--height 5000").find("antenna_height_m is 5000; it must be -100 to 1000 m") != std::string::npos);
  CHECK(with("--profile boat").find("boat") != std::string::npos);

  CHECK(folder.without_path(convert((folder / "none").string() + " " + (folder / "x").string()).output) ==
        "kedge-convert: none: no such file or folder\n");
  CHECK(convert("only-one").exit_code == 2);
}

TEST_CASE("rows that a station refuses are converted and told") {
  const Folder folder;
  folder.write("logs/anchors.csv", anchors_csv);
  folder.write("logs/ranges.csv", "t_s,tag,anchor,range_m\n0,1,4,2\n0.1,1,4,-9\n0.2,1,4,2\n0.3,1,4,20000\n");
  const Run run = convert((folder / "logs").string() + " " + (folder / "c.pcapng").string());
  CHECK(run.exit_code == 0);
  CHECK(folder.without_path(run.output) ==
        "4 packets of 1 tags\n2 of them a station refuses, the first: logs/ranges.csv:3: range: distance_m -9 is not "
        "within -5 "
        "to 10000 m; is it in mm or cm?\n");
}

TEST_CASE("nothing is overwritten") {
  const Folder folder;
  folder.write("logs/anchors.csv", anchors_csv);
  folder.write("logs/ranges.csv", ranges_csv);
  folder.write("c.pcapng", "precious");
  Run run = convert((folder / "logs").string() + " " + (folder / "c.pcapng").string());
  CHECK(run.exit_code == 1);
  CHECK(folder.without_path(run.output) ==
        "kedge-convert: c.pcapng exists: captures are never overwritten; give another name or remove it\n");
  CHECK(read_text(folder / "c.pcapng") == "precious");

  fs::remove(folder / "c.pcapng");
  folder.write("c.txtpb", "precious");
  run = convert((folder / "logs").string() + " " + (folder / "c.pcapng").string() + " --config-out " +
                (folder / "c.txtpb").string());
  CHECK(run.exit_code == 1);
  CHECK(folder.without_path(run.output) ==
        "kedge-convert: c.txtpb exists: it is never overwritten; give another name or remove it\n");
  CHECK(read_text(folder / "c.txtpb") == "precious");
  CHECK_FALSE(fs::exists(folder / "c.pcapng"));

  REQUIRE(convert((folder / "logs").string() + " " + (folder / "c.pcapng").string()).exit_code == 0);
  run = convert((folder / "c.pcapng").string() + " " + (folder / "logs").string());
  CHECK(run.exit_code == 1);
  CHECK(folder.without_path(run.output) ==
        "kedge-convert: logs/ranges.csv exists: tables are never overwritten; give another folder or remove it\n");
}

TEST_CASE("a damaged capture gives the tables of what is left, and says what is lost") {
  const Folder folder;
  folder.write("logs/anchors.csv", anchors_csv);
  folder.write("logs/ranges.csv", ranges_csv);
  REQUIRE(convert((folder / "logs").string() + " " + (folder / "c.pcapng").string()).exit_code == 0);
  std::string bytes = read_text(folder / "c.pcapng");
  bytes.resize(bytes.size() - 5);
  folder.write("cut.pcapng", bytes);
  Run run = convert((folder / "cut.pcapng").string() + " " + (folder / "tables").string());
  CHECK(run.exit_code == 0);
  CHECK(run.output.find("the file ends within a block of") != std::string::npos);
  CHECK(table_of(folder / "tables/ranges.csv").rows() == 3);

  folder.write("text.pcapng", "hello, this is text");
  run = convert((folder / "text.pcapng").string() + " " + (folder / "t2").string());
  CHECK(run.exit_code == 2);
  CHECK(folder.without_path(run.output) == "kedge-convert: text.pcapng: a text file, not a pcapng file\n");
  run = convert((folder / "c.pcapng").string() + " " + (folder / "t3").string() + " --height 1");
  CHECK(run.exit_code == 2);
  CHECK(folder.without_path(run.output) == "kedge-convert: --height is for folders of logs, but c.pcapng is a file\n");
}

TEST_CASE("a message file becomes tables") {
  const Folder folder;
  folder.write(
      "m.jsonl",
      "{\"sequence\":\"1\",\"position\":{\"tag\":\"cart-1\",\"timeNs\":\"1500000000\",\"standing\":\"settled\","
      "\"eastM\":1.5,"
      "\"northM\":-2,\"upM\":0.25,\"covarianceM2\":[1,2,3,4,5,6],\"radius95M\":0.5}}\n"
      "{\"position\":{\"tag\":\"cart-2\",\"timeNs\":\"-1\",\"standing\":\"ring\",\"ringRadiusM\":7,\"ringAnchor\":"
      "\"mast\"}}\n"
      "not a message\n"
      "{\"speed\":{\"tag\":\"cart-1\",\"timeNs\":\"1500000000\",\"speedMps\":2.5}}\n"
      "{\"health\":{\"tag\":\"cart-1\",\"timeNs\":\"2000000000\",\"concerns\":[{\"concern\":\"range_stale\",\"figure\":"
      "2.5},"
      "{\"concern\":\"battery_low\",\"figure\":3.1}],\"tagHealth\":{\"standing\":\"settled\",\"restarts\":2}}}\n"
      "{\"pulse\":{\"timeNs\":\"2000000000\"}}\n");
  const Run run = convert((folder / "m.jsonl").string() + " " + (folder / "t").string());
  CHECK(run.exit_code == 0);
  CHECK(run.output.find("5 messages: 2 position, 1 speed and 1 health rows") != std::string::npos);
  CHECK(folder.without_path(run.output).find("1 lines passed over, the first: m.jsonl:3: no message") !=
        std::string::npos);

  const auto cell = [&](const char* file, const char* column, std::size_t row) {
    const CsvTable table = table_of(folder / (std::string("t/") + file));
    const auto texts = table.texts(column);
    INFO((texts ? "" : texts.error()));
    REQUIRE(texts);
    return std::string((*texts)[row]);
  };
  CHECK(cell("positions.csv", "t_s", 0) == "1.500000");
  CHECK(cell("positions.csv", "t_s", 1) == "-0.000000001");
  CHECK(cell("positions.csv", "tag", 1) == "cart-2");
  CHECK(cell("positions.csv", "standing", 0) == "settled");
  CHECK(cell("positions.csv", "east_m", 0) == "1.5");
  CHECK(cell("positions.csv", "east_m", 1).empty());
  CHECK(cell("positions.csv", "covariance_m2_nu", 0) == "5");
  CHECK(cell("positions.csv", "covariance_m2_nu", 1).empty());
  CHECK(cell("positions.csv", "ring_radius_m", 1) == "7");
  CHECK(cell("positions.csv", "mirror_east_m", 0).empty());
  CHECK(cell("speeds.csv", "speed_mps", 0) == "2.5");
  CHECK(cell("speeds.csv", "course_deg", 0).empty());
  CHECK(cell("health.csv", "concerns", 0) == "range_stale=2.5 battery_low=3.1");
  CHECK(cell("health.csv", "tag_health_restarts", 0) == "2");
  CHECK(cell("health.csv", "station_health_records", 0).empty());
}

// STAR-loc recordings (Duembgen et al., arXiv:2309.05518), see the data folder's README: real ranges with raw
// counters (s1) or distances (s5), and inertial logs.
TEST_CASE("the open room recordings convert and come back to the digits") {
  const char* datasets = std::getenv("KEDGE_DATASETS");
  if (datasets == nullptr) {
    fmt::print("skipped: no data\n");
    return;
  }
  const std::string name = GENERATE("starloc_loop-2d-fast_s1", "starloc_loop-3d_s5");
  const bool counters = name == "starloc_loop-2d-fast_s1";
  const Folder folder;
  const fs::path logs = fs::path(datasets) / name;
  const Run there = convert(logs.string() + " " + (folder / "c.pcapng").string() + " --tags 1");
  INFO(there.output);
  REQUIRE(there.exit_code == 0);
  CHECK(there.output.find("refuses") == std::string::npos);
  REQUIRE(convert((folder / "c.pcapng").string() + " " + (folder / "t").string()).exit_code == 0);

  const CsvTable inertial = table_of(logs / "inertial.csv.gz");
  check_same_numbers(inertial, table_of(folder / "t/inertial.csv"), {"t_s", "gx", "gy", "gz", "ax", "ay", "az"},
                     by_time(inertial));

  const CsvTable ranges = table_of(logs / "ranges.csv.gz");
  const auto tags = ranges.counts("tag");
  REQUIRE(tags);
  std::vector<std::size_t> order = by_time(ranges);
  std::erase_if(order, [&](std::size_t row) { return (*tags)[row] != 1; });
  const CsvTable copy = table_of(folder / "t/ranges.csv");
  std::vector<std::string> columns = {"t_s", "tag", "anchor"};
  if (counters) {
    for (const char* column : {"tx1_tick", "rx1_tick", "tx2_tick", "rx2_tick", "tx3_tick", "rx3_tick"})
      columns.emplace_back(column);
  } else {
    columns.emplace_back("range_m");
  }
  check_same_numbers(ranges, copy, columns, order);
  // The counters give the authors' ranges to 0.11 mm (the data's README).
  const auto was = ranges.numbers("range_m");
  const auto is = copy.numbers("range_m");
  REQUIRE(is);
  double worst_m = 0.0;
  for (std::size_t row = 0; row < order.size(); ++row)
    worst_m = std::max(worst_m, std::abs((*was)[order[row]] - (*is)[row]));
  CHECK(worst_m < 0.00011);
}

TEST_CASE("all other open recordings with anchors convert") {
  const char* datasets = std::getenv("KEDGE_DATASETS");
  if (datasets == nullptr) {
    fmt::print("skipped: no data\n");
    return;
  }
  for (const char* name : {"plaza2", "outdoor_los_a1", "outdoor_nlos_a1", "labyrinth"}) {
    const Folder folder;
    const Run run = convert((fs::path(datasets) / name).string() + " " + (folder / "c.pcapng").string());
    INFO(name << ": " << run.output);
    REQUIRE(run.exit_code == 0);
    CHECK(run.output.find("refuses") == std::string::npos);
  }
}
