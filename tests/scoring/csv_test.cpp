#include <zlib.h>

#include <catch2/catch.hpp>
#include <cmath>
#include <fstream>

#include "scoring/csv.h"
#include "support/temporary_folder.h"

using kedge::scoring::CsvTable;

namespace {

std::string error_of(const std::string& text) {
  const auto table = CsvTable::parse(text, "log.csv");
  return table ? "" : table.error();
}

}  // namespace

TEST_CASE("columns are found by name, whatever their order and line ends") {
  const auto table = CsvTable::parse(
      "\xEF\xBB\xBFt_s, tag ,count\r\n0.5,cart-1,4294967295\r\n\r\n+1.5e0, cart-2 ,18446744073709551615", "log.csv");
  REQUIRE(table);
  CHECK(table->rows() == 2);
  CHECK(*table->numbers("t_s") == std::vector<double>{0.5, 1.5});
  CHECK(*table->texts("tag") == std::vector<std::string_view>{"cart-1", "cart-2"});
  CHECK(*table->counts("count") == std::vector<std::uint64_t>{4294967295U, 18446744073709551615U});
  CHECK(table->place(1) == "log.csv:4");
  CHECK_FALSE(table->has("T_S"));
}

TEST_CASE("a table may be empty below its names") {
  const auto table = CsvTable::parse("t_s,x_m\n", "log.csv");
  REQUIRE(table);
  CHECK(table->rows() == 0);
  CHECK(table->numbers("x_m")->empty());
}

TEST_CASE("what is wrong with a table is said with its place") {
  CHECK(error_of("") == "log.csv:1: empty; the first line must name the columns");
  CHECK(error_of("t_s,,x_m\n") == "log.csv:1: column 2 has no name");
  CHECK(error_of("t_s,x_m,t_s\n") == "log.csv:1: column 't_s' is named twice");
  CHECK(error_of("t_s,x_m\n1,2\n1,2,3\n") == "log.csv:3: 3 cells where the first line names 2 columns");
  CHECK(error_of("t_s,x_m\n1\n") == "log.csv:2: 1 cells where the first line names 2 columns");
  CHECK(error_of("t_s,x_m\n1,\"2\"\n") == "log.csv:2: quoted cells are not read; write cells without quotes");
  std::string wide = "c0";
  for (int i = 1; i <= 256; ++i) wide += ",c" + std::to_string(i);
  CHECK(error_of(wide + "\n") == "log.csv:1: more than 256 columns");
}

TEST_CASE("what is wrong with a cell is said with its place") {
  const auto table = CsvTable::parse("t_s,x_m\n1,2\n2,two\n3,nan\n4,1e999\n5,\n6,0x10\n", "log.csv");
  REQUIRE(table);
  CHECK(table->numbers("y_m").error() == "log.csv:1: no column 'y_m'; there are t_s, x_m");
  CHECK(table->numbers("x_m").error() == "log.csv:3: column 'x_m' holds 'two' where a finite number is wanted");
  CHECK(table->counts("x_m").error() == "log.csv:3: column 'x_m' holds 'two' where a whole number from 0 is wanted");
  for (const char* cell : {"nan", "inf", "1e999", "", "0x10", "1.5m", "--1", "1 2", "+-3"}) {
    const auto one = CsvTable::parse(std::string("a,b\n0,") + cell + "\n", "log.csv");
    REQUIRE(one);
    CHECK(one->numbers("b").error() ==
          "log.csv:2: column 'b' holds '" + std::string(cell) + "' where a finite number is wanted");
  }
  const auto gaps = CsvTable::parse("a,b\n0,\n1,7\n", "log.csv");
  const auto values = gaps->numbers("b", CsvTable::Empty::as_nan);
  REQUIRE(values);
  CHECK(std::isnan(values->at(0)));
  CHECK(values->at(1) == 7.0);
}

TEST_CASE("what cannot be printed does not reach the terminal") {
  const auto table = CsvTable::parse("a\n\x1b[31m" + std::string(100, 'x') + "\n", "log.csv");
  REQUIRE(table);
  CHECK(table->numbers("a").error() ==
        "log.csv:2: column 'a' holds '?[31m" + std::string(35, 'x') + "...' where a finite number is wanted");
}

TEST_CASE("files are read plain or compressed") {
  const kedge::test::TemporaryFolder folder;
  const std::string text = "t_s,x_m\n0,1.25\n";
  const auto plain = folder.path() / "plain.csv";
  std::ofstream(plain) << text;
  const auto packed = folder.path() / "packed.csv.gz";
  gzFile file = gzopen(packed.c_str(), "wb");
  gzwrite(file, text.data(), static_cast<unsigned>(text.size()));
  gzclose(file);
  for (const auto& path : {plain, packed}) {
    const auto table = CsvTable::read(path);
    REQUIRE(table);
    CHECK(table->numbers("x_m")->at(0) == 1.25);
  }
  CHECK(CsvTable::read(folder.path() / "none.csv").error() ==
        (folder.path() / "none.csv").string() + ": not a file that can be read; give the path of a CSV file");
  CHECK_FALSE(CsvTable::read(folder.path()).ok());
}

TEST_CASE("a compressed file that ends early or is damaged is refused") {
  const kedge::test::TemporaryFolder folder;
  const auto whole = folder.path() / "whole.csv.gz";
  std::string text = "t_s,x_m\n";
  for (int i = 0; i < 3000; ++i) text += std::to_string(i) + "," + std::to_string(i * 7919 % 1000) + "\n";
  gzFile file = gzopen(whole.c_str(), "wb");
  gzwrite(file, text.data(), static_cast<unsigned>(text.size()));
  gzclose(file);
  std::ifstream in(whole, std::ios::binary);
  const std::string bytes((std::istreambuf_iterator<char>(in)), std::istreambuf_iterator<char>());
  const auto cut = folder.path() / "cut.csv.gz";
  std::ofstream(cut, std::ios::binary) << bytes.substr(0, bytes.size() / 2);
  const auto read = CsvTable::read(cut);
  REQUIRE_FALSE(read.ok());
  CHECK_THAT(read.error(), Catch::Contains("the compressed data ends early); fetch the file again"));
  const auto flipped = folder.path() / "flipped.csv.gz";
  std::string bad = bytes;
  bad[bad.size() - 6] = static_cast<char>(bad[bad.size() - 6] ^ 0x40);  // in the CRC-32 of the trailer
  std::ofstream(flipped, std::ios::binary) << bad;
  CHECK_THAT(CsvTable::read(flipped).error(), Catch::Contains("damaged after"));
}
