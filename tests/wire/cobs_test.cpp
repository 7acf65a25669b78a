#include "wire/cobs.h"

#include <catch2/catch.hpp>
#include <random>
#include <vector>

#include "support/bytes.h"

using namespace kedge;
using namespace kedge::wire;

namespace {

std::vector<std::byte> encoded(const std::vector<std::byte>& bytes) {
  std::vector<std::byte> out(cobs_encoded_max(bytes.size()));
  out.resize(cobs_encode(bytes, out));
  return out;
}

}  // namespace

TEST_CASE("COBS: everything comes back, without a zero, within the bound") {
  std::mt19937 random(1);
  for (std::size_t size = 0; size < 1200; ++size) {
    std::vector<std::byte> bytes(size);
    const unsigned zero_every = size % 5 == 0 ? 1'000'000 : 1 + size % 300;
    for (std::byte& byte : bytes) {
      byte = random() % zero_every == 0 ? std::byte{0} : static_cast<std::byte>(1 + random() % 255);
    }
    const auto out = encoded(bytes);
    INFO("size " << size);
    REQUIRE(out.size() <= cobs_encoded_max(size));
    REQUIRE(std::find(out.begin(), out.end(), std::byte{0}) == out.end());
    std::vector<std::byte> back = out;
    const auto length = cobs_decode(back, back);  // in place
    REQUIRE(length.has_value());
    back.resize(*length);
    REQUIRE(back == bytes);
  }
}

TEST_CASE("COBS: what is no encoding is refused") {
  for (const char* hex : {"", "02", "03 11", "05 11 22 33", "00", "03 11 00", "02 11 00", "FF 01"}) {
    const auto bytes = test::from_hex(hex);
    std::vector<std::byte> out(bytes.size());
    INFO(hex);
    CHECK_FALSE(cobs_decode(bytes, out).has_value());
  }
}
