#include <sys/resource.h>
#include <unistd.h>

#include <catch2/catch.hpp>
#include <csignal>
#include <filesystem>

#include "capture/file_sink.h"
#include "capture/file_source.h"
#include "capture/sample.h"
#include "support/temporary_folder.h"

using namespace kedge;
using namespace kedge::capture;
using namespace kedge::test;

namespace {

/// Files of this process cannot grow beyond: what a full disk looks like to a writer.
class FileSizeLimit {
 public:
  explicit FileSizeLimit(rlim_t bytes) {
    old_handler_ = std::signal(SIGXFSZ, SIG_IGN);
    REQUIRE(::getrlimit(RLIMIT_FSIZE, &old_) == 0);
    const rlimit limited = {bytes, old_.rlim_max};
    REQUIRE(::setrlimit(RLIMIT_FSIZE, &limited) == 0);
  }
  ~FileSizeLimit() {
    ::setrlimit(RLIMIT_FSIZE, &old_);
    std::signal(SIGXFSZ, old_handler_);
  }
  FileSizeLimit(const FileSizeLimit&) = delete;
  FileSizeLimit& operator=(const FileSizeLimit&) = delete;

 private:
  rlimit old_{};
  void (*old_handler_)(int) = nullptr;
};

std::vector<Kept> read_file(const std::filesystem::path& path) {
  FileSource source;
  REQUIRE(source.open(path));
  Result<CaptureReader> reader = CaptureReader::open(source);
  REQUIRE(reader);
  std::vector<Kept> records;
  Arrival arrival;
  for (Next next = reader->next(arrival); next != Next::end; next = reader->next(arrival)) {
    REQUIRE(next == Next::record);
    const RawRecord& record = arrival.record;
    records.push_back(
        {record.time_ns, record.source, record.sequence, {record.bytes.begin(), record.bytes.end()}, arrival.path});
  }
  return records;
}

}  // namespace

TEST_CASE("a capture on disk comes back") {
  const TemporaryFolder folder;
  {
    FileSink sink;
    REQUIRE(sink.create(folder / "a.pcapng"));
    Result<CaptureWriter> writer = CaptureWriter::begin(sink, sample_head());
    REQUIRE(writer);
    for (const Kept& record : sample_records()) REQUIRE(writer->write(record.arrival()));
    REQUIRE(writer->flush());
    CHECK(std::filesystem::file_size(folder / "a.pcapng") == sink.size());
    REQUIRE(sink.close());
  }
  CHECK(read_file(folder / "a.pcapng") == sample_records());
}

TEST_CASE("an existing file is never overwritten") {
  const TemporaryFolder folder;
  FileSink first;
  REQUIRE(first.create(folder / "a.pcapng"));
  FileSink second;
  const Status status = second.create(folder / "a.pcapng");
  REQUIRE_FALSE(status);
  CHECK(status.error() ==
        (folder / "a.pcapng").string() + " exists: captures are never overwritten; give another name or remove it");
}

TEST_CASE("a capture in a folder that is not there says so") {
  const TemporaryFolder folder;
  FileSink sink;
  const Status status = sink.create(folder / "none/a.pcapng");
  REQUIRE_FALSE(status);
  CHECK(status.error() == "creating " + (folder / "none/a.pcapng").string() + ": No such file or directory");
  FileSource source;
  const Status opened = source.open(folder / "b.pcapng");
  REQUIRE_FALSE(opened);
  CHECK(opened.error() == "opening " + (folder / "b.pcapng").string() + ": No such file or directory");
}

TEST_CASE("a folder is not read as a capture") {
  const TemporaryFolder folder;
  FileSource source;
  REQUIRE(source.open(folder / "."));
  const Result<CaptureReader> reader = CaptureReader::open(source);
  REQUIRE_FALSE(reader);
  CHECK(reader.error() == "reading " + (folder / ".").string() + ": Is a directory");
}

TEST_CASE("a disk that is full for a while costs the records refused then, and no other") {
  const TemporaryFolder folder;
  FileSink sink;
  REQUIRE(sink.create(folder / "a.pcapng"));
  Result<CaptureWriter> writer = CaptureWriter::begin(sink, sample_head());
  REQUIRE(writer);
  std::vector<Kept> taken;
  Kept record = sample_records()[2];
  record.bytes.assign(1000, std::byte{7});
  const auto write_some = [&](int count) {
    int refused = 0;
    std::string why;
    for (int i = 0; i < count; ++i) {
      ++record.sequence;
      const Status status = writer->write(record.arrival());
      if (status) {
        taken.push_back(record);
      } else {
        ++refused;
        why = status.error();
      }
    }
    if (refused > 0) CHECK(why == "writing " + (folder / "a.pcapng").string() + ": File too large");
    return refused;
  };
  CHECK(write_some(100) == 0);
  {
    const FileSizeLimit limit(150'000);
    CHECK(write_some(200) > 0);
    CHECK_FALSE(writer->flush());
    CHECK(read_file(folder / "a.pcapng").size() < taken.size());  // the file ends with a whole block
  }
  CHECK(write_some(100) == 0);
  REQUIRE(sink.close());
  CHECK(read_file(folder / "a.pcapng") == taken);
}
