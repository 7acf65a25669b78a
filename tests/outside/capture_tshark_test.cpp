// Captures as other programs see them: tshark and capinfos (Wireshark project, Debian package tshark).
#include <fmt/core.h>
#include <unistd.h>

#include <array>
#include <catch2/catch.hpp>
#include <cstdio>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <sstream>

#include "capture/sample.h"
#include "support/temporary_folder.h"

using namespace kedge;
using namespace kedge::capture;
using namespace kedge::test;

namespace {

struct Run {
  int exit_code = 0;
  std::string output;  ///< both streams
};

Run run(const std::string& command) {
  Run done;
  std::FILE* pipe = ::popen((command + " 2>&1").c_str(), "r");
  REQUIRE(pipe != nullptr);
  std::array<char, 4096> piece{};
  for (std::size_t got = 0; (got = std::fread(piece.data(), 1, piece.size(), pipe)) > 0;)
    done.output.append(piece.data(), got);
  done.exit_code = ::pclose(pipe);
  return done;
}

bool have_tshark() {
  const bool have = run("command -v tshark && command -v capinfos").exit_code == 0;
  if (!have) fmt::print("skipped: no tshark\n");
  return have;
}

/// The bytes as a file, gone at the end.
class TemporaryFile {
 public:
  explicit TemporaryFile(std::span<const std::byte> bytes)
      : path_(folder_.write("capture.pcapng", {reinterpret_cast<const char*>(bytes.data()), bytes.size()})) {}
  [[nodiscard]] std::string path() const { return path_.string(); }

 private:
  TemporaryFolder folder_;
  std::filesystem::path path_;
};

std::string hex(std::span<const std::byte> bytes) {
  std::string text;
  for (const std::byte byte : bytes) text += fmt::format("{:02x}", std::to_integer<unsigned>(byte));
  return text;
}

/// The sample, with sizes from 0 to 1400 bytes and times of a plain day: tshark shows no negative ones.
std::vector<Kept> plain_records() {
  std::vector<Kept> records;
  for (std::size_t i = 0; i < 700; ++i) {
    Kept record = sample_records()[i % 7];
    record.time_ns = static_cast<TimeNs>(i) * 5'000'001 + 1;
    record.sequence = i;
    record.bytes.assign(i * 2 % 1400 + (i % 3), static_cast<std::byte>(i * 37));
    records.push_back(record);
  }
  return records;
}

std::vector<std::string> lines_of(const std::string& text) {
  std::vector<std::string> lines;
  std::istringstream in(text);
  for (std::string line; std::getline(in, line);) {
    if (line.find("Running as user") == std::string::npos) lines.push_back(line);
  }
  return lines;
}

}  // namespace

TEST_CASE("tshark reads our captures: stamps, interfaces, numbers, datagrams, checksums") {
  if (!have_tshark()) return;
  const CaptureHead head = sample_head();
  const std::vector<Kept> records = plain_records();
  const TemporaryFile file(write(head, records).bytes);
  const Run shown = run("tshark -n -r " + file.path() +
                        " -o ip.check_checksum:TRUE -o udp.check_checksum:TRUE -T fields -E separator=/s -E quote=n"
                        " -e frame.time_epoch -e frame.interface_name -e frame.packet_id -e udp.srcport -e udp.dstport"
                        " -e udp.length -e udp.checksum.status -e ip.checksum.status");
  const std::vector<std::string> lines = lines_of(shown.output);
  REQUIRE(lines.size() == records.size());
  for (std::size_t i = 0; i < records.size(); ++i) {
    const Kept& record = records[i];
    const TimeNs utc_ns = record.time_ns + head.utc_minus_monotonic_ns;
    std::string expected =
        fmt::format("{}.{:09} {} {}", utc_ns / ns_per_s, utc_ns % ns_per_s,
                    record.source == 0 ? "station" : head.links[record.source - 1].name, record.sequence);
    if (record.source == 1) {
      // Checksum status 1 is "good"; IPv6 headers have none.
      expected += fmt::format(" {} {} {} 1 {}", record.path.from.port, record.path.to.port, record.bytes.size() + 8,
                              record.path.family == Family::v4 ? "1" : "");
    } else {
      expected += "     ";
    }
    CHECK(lines[i] == expected);
  }
}

TEST_CASE("tshark shows the payload of every record as it came, and nothing malformed") {
  if (!have_tshark()) return;
  const std::vector<Kept> records = plain_records();
  const TemporaryFile file(write(sample_head(), records).bytes);
  const Run shown = run("tshark -n -r " + file.path() + " -T fields -e udp.payload -e data.data");
  const std::vector<std::string> lines = lines_of(shown.output);
  REQUIRE(lines.size() == records.size());
  for (std::size_t i = 0; i < records.size(); ++i) {
    CHECK(lines[i].find(hex(records[i].bytes)) != std::string::npos);
  }
  CHECK(lines_of(run("tshark -n -r " + file.path() + " -Y _ws.malformed").output).empty());
}

TEST_CASE("capinfos shows the head and finds the packets in strict order") {
  if (!have_tshark()) return;
  const std::vector<Kept> records = plain_records();
  const TemporaryFile file(write(sample_head(), records).bytes);
  const Run shown = run("capinfos " + file.path());
  CHECK(shown.exit_code == 0);
  for (const char* expected :
       {"File type:           Wireshark/... - pcapng", "Capture hardware:    x86-64",
        "Capture application: kedged 0.1.0", "Number of packets:   700", "Strict time order:   True",
        "File timestamp precision:  nanoseconds (9)", "Number of interfaces in file: 3", "Name = field", "Name = cable",
        "Name = station", "site { name: \"yard\" }"}) {
    INFO(shown.output);
    CHECK(shown.output.find(expected) != std::string::npos);
  }
}

TEST_CASE("tshark says of a cut capture that it is cut in the middle of a packet") {
  if (!have_tshark()) return;
  const Written written = write(sample_head(), plain_records());
  const std::size_t cut = written.block_ends[700] - 5;
  const TemporaryFile file(std::span(written.bytes).first(cut));
  const Run shown = run("tshark -n -r " + file.path());
  CHECK(shown.exit_code != 0);
  CHECK(shown.output.find("cut short in the middle of a packet") != std::string::npos);
}

TEST_CASE("a pcap file of another program is named, with the way to convert it") {
  if (!have_tshark()) return;
  const TemporaryFile file({});
  REQUIRE(run("echo '0000 45 00 00 1c' | text2pcap -F pcap - " + file.path()).exit_code == 0);
  std::ifstream in(file.path(), std::ios::binary);
  const std::string text((std::istreambuf_iterator<char>(in)), std::istreambuf_iterator<char>());
  CHECK(read(bytes_of(text)).refusal == "a pcap file, not pcapng: convert it with editcap -F pcapng");
}
