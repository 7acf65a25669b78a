// kedge-simulate as people run it: what it does to files that are there, and in which order it writes.
#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>
#include <iterator>

#include "support/program.h"
#include "support/temporary_folder.h"

using namespace kedge;
namespace fs = std::filesystem;

namespace {

test::Run simulate(const std::string& arguments) { return test::run_program("tools/kedge-simulate", arguments); }

void write_text(const std::string& path, const std::string& text) { std::ofstream(path, std::ios::binary) << text; }

std::string read_text(const std::string& path) {
  std::ifstream file(path, std::ios::binary);
  return {std::istreambuf_iterator<char>(file), std::istreambuf_iterator<char>()};
}

}  // namespace

TEST_CASE("a simulated capture comes with the configuration and the truth asked for") {
  const test::TemporaryFolder folder;
  const std::string capture = folder.file("c.pcapng");
  const std::string truth = folder.file("t.csv");
  const std::string config = folder.file("c.txtpb");
  const test::Run run =
      simulate("straight --seconds 5 --capture " + capture + " --truth " + truth + " --config-out " + config);
  CHECK(run.output.empty());
  REQUIRE(run.exit_code == 0);
  CHECK(fs::file_size(capture) > 0);
  // 5 s at 50 ms with both ends, and the line of names.
  std::ifstream rows(truth);
  std::string row;
  int count = 0;
  while (std::getline(rows, row)) ++count;
  CHECK(count == 102);
  // The capture holds the same configuration.
  CHECK(read_text(capture).find("device_id: 11") != std::string::npos);
  CHECK(read_text(config).find("device_id: 11") != std::string::npos);
}

TEST_CASE("the simulator overwrites nothing, and leaves no part of a run that could not be") {
  const test::TemporaryFolder folder;
  const std::string capture = folder.file("c.pcapng");
  const std::string truth = folder.file("t.csv");
  const std::string config = folder.file("c.txtpb");
  const std::string all = "straight --seconds 5 --capture " + capture + " --truth " + truth + " --config-out " + config;

  SECTION("a capture") {
    write_text(capture, "precious");
    const test::Run run = simulate(all);
    CHECK(run.exit_code == 1);
    CHECK(run.output ==
          "kedge-simulate: " + capture + " exists: captures are never overwritten; give another name or remove it\n");
    CHECK(read_text(capture) == "precious");
    CHECK_FALSE(fs::exists(config));
  }
  SECTION("a configuration") {
    write_text(config, "precious");
    const test::Run run = simulate(all);
    CHECK(run.exit_code == 1);
    CHECK(run.output ==
          "kedge-simulate: " + config + " exists: it is never overwritten; give another name or remove it\n");
    CHECK(read_text(config) == "precious");
    CHECK_FALSE(fs::exists(capture));
    CHECK_FALSE(fs::exists(truth));
  }
  SECTION("a configuration, live") {
    write_text(config, "precious");
    CHECK(simulate("straight --seconds 1 --udp 127.0.0.1:9 --config-out " + config).exit_code == 1);
    CHECK(read_text(config) == "precious");
  }
  SECTION("a truth") {
    write_text(truth, "precious");
    const test::Run run = simulate(all);
    CHECK(run.exit_code == 1);
    CHECK(run.output ==
          "kedge-simulate: " + truth + " exists: it is never overwritten; give another name or remove it\n");
    CHECK(read_text(truth) == "precious");
    CHECK_FALSE(fs::exists(capture));
    CHECK_FALSE(fs::exists(config));
  }
  SECTION("a folder that is not there") {
    const test::Run run =
        simulate("straight --seconds 5 --capture " + capture + " --config-out " + folder.file("none/c.txtpb"));
    CHECK(run.exit_code == 1);
    CHECK(run.output == "kedge-simulate: writing " + folder.file("none/c.txtpb") + ": No such file or directory\n");
  }
}
