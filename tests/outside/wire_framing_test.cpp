// Checksum and framing against published examples.
#include <catch2/catch.hpp>
#include <numeric>
#include <string>

#include "support/bytes.h"
#include "wire/cobs.h"
#include "wire/crc32c.h"

using namespace kedge;
using Bytes = std::vector<std::byte>;

// RFC 3720 (iSCSI), appendix B.4, CRC examples. The RFC prints the bytes as sent; these are the numbers.
TEST_CASE("CRC-32C, RFC 3720 B.4") {
  CHECK(wire::crc32c(Bytes(32, std::byte{0x00})) == 0x8A9136AA);
  CHECK(wire::crc32c(Bytes(32, std::byte{0xFF})) == 0x62A8AB43);
  Bytes rising(32);
  for (std::size_t i = 0; i < 32; ++i) rising[i] = static_cast<std::byte>(i);
  CHECK(wire::crc32c(rising) == 0x46DD794E);
  CHECK(wire::crc32c(Bytes(rising.rbegin(), rising.rend())) == 0x113FDB5C);
}

// Catalogue check value, from memory.
TEST_CASE("CRC-32C of 123456789 (memory)") {
  CHECK(wire::crc32c(test::from_hex("31 32 33 34 35 36 37 38 39")) == 0xE3069283);
}

// After Cheshire and Baker, Consistent Overhead Byte Stuffing, IEEE/ACM Transactions on Networking 7(2),
// 1999; the examples are from memory.
TEST_CASE("COBS examples (memory)") {
  struct Example {
    std::string plain;
    std::string encoded;
  };
  std::string run_254;
  for (int i = 1; i <= 254; ++i) run_254 += test::to_hex(Bytes{static_cast<std::byte>(i)}) + " ";
  const std::vector<Example> examples = {
      {"", "01"},
      {"00", "01 01"},
      {"00 00", "01 01 01"},
      {"11 22 00 33", "03 11 22 02 33"},
      {"11 22 33 44", "05 11 22 33 44"},
      {"11 00 00 00", "02 11 01 01 01"},
      {run_254, "FF " + run_254},
      {"00 " + run_254, "01 FF " + run_254},
      {run_254 + "FF", "FF " + run_254 + "02 FF"},
      {run_254 + "00", "FF " + run_254 + "01 01"},
  };
  for (const Example& example : examples) {
    INFO(example.plain);
    const Bytes plain = test::from_hex(example.plain);
    const Bytes encoded = test::from_hex(example.encoded);
    Bytes out(wire::cobs_encoded_max(plain.size()));
    out.resize(wire::cobs_encode(plain, out));
    CHECK(test::to_hex(out) == test::to_hex(encoded));
    Bytes back(encoded.size());
    const auto size = wire::cobs_decode(encoded, back);
    REQUIRE(size.has_value());
    back.resize(*size);
    CHECK(back == plain);
  }
}
