// Two-way ranging against published facts and an open recording.
#include <fmt/core.h>

#include <catch2/catch.hpp>
#include <cmath>
#include <cstdlib>
#include <filesystem>
#include <iostream>

#include "core/physics.h"
#include "scoring/csv.h"
#include "wire/two_way.h"

using namespace kedge;
using namespace kedge::wire;

// SI: c = 299792458 m/s exactly; IEEE 802.15.4 HRP UWB chip rate 499.2 MHz, 128 ticks a chip.
TEST_CASE("the time unit is 15.65004 ps, 4.691764 mm of light") {
  CHECK(ranging_tick_s * 1e12 == Approx(15.65004).margin(0.000005));
  CHECK(ranging_tick_s * 299792458.0 * 1e3 == Approx(4.691764).margin(0.0000005));
}

namespace {

/// A tag at `distance_m` whose clock is true; the anchor's runs `offset_ppm` fast and answers after
/// `answer_s` of true time. Ticks are whole: the answer is long enough for that not to matter.
struct Exchange {
  double distance_m;
  double offset_ppm;
  double answer_s;

  [[nodiscard]] double flight_s() const { return distance_m / 299792458.0; }
  [[nodiscard]] std::uint64_t tag(double time_s) const {
    return static_cast<std::uint64_t>(std::llround(time_s / ranging_tick_s));
  }
  [[nodiscard]] std::uint64_t anchor(double time_s) const {
    return static_cast<std::uint64_t>(std::llround(time_s * (1.0 + offset_ppm * 1e-6) / ranging_tick_s));
  }
};

double range_m(const TwoWay& stamps) {
  const auto result = two_way_range_m(stamps, 299792458.0);
  REQUIRE(result.ok());
  return *result;
}

}  // namespace

// The single-sided error is half of c x offset x reply time (Neirynck, Luk, McLaughlin, An alternative
// double-sided two-way ranging method, WPNC 2016): 20 ppm over 5 ms is 15.0 m. A fast anchor counts a
// longer reply, so the range comes out short.
TEST_CASE("single-sided ranging errs by 15.0 m at 20 ppm and 5 ms") {
  const Exchange x{100.0, 20.0, 5e-3};
  const double flight_s = x.flight_s();
  SingleSided stamps{
      x.tag(0), x.anchor(flight_s), x.anchor(flight_s + x.answer_s), x.tag(2 * flight_s + x.answer_s), {}};
  CHECK(range_m({40, stamps}) - 100.0 == Approx(-15.0).margin(0.02));
  stamps.clock_offset_ppm = 20.0;
  CHECK(range_m({40, stamps}) == Approx(100.0).margin(0.01));
}

// The asymmetric formula of the same paper cancels it for unequal reply times; the symmetric mean does
// not: it errs by a quarter of c x offset x difference of the reply times.
TEST_CASE("double-sided ranging cancels the clock offset, asymmetric replies included") {
  const Exchange x{100.0, 20.0, 5e-3};
  const double second_answer_s = 1e-3;
  const double flight_s = x.flight_s();
  const double reply_s = flight_s + x.answer_s;
  const double final_s = reply_s + flight_s + second_answer_s;
  DoubleSided stamps{x.tag(0),
                     x.anchor(flight_s),
                     x.anchor(reply_s),
                     x.tag(reply_s + flight_s),
                     x.tag(final_s),
                     x.anchor(final_s + flight_s),
                     false};
  CHECK(range_m({40, stamps}) == Approx(100.0).margin(0.01));
  stamps.symmetric = true;
  CHECK(range_m({40, stamps}) - 100.0 == Approx(-0.25 * 299792458.0 * 20e-6 * 4e-3).margin(0.02));
}

// F. Duembgen et al., STAR-loc: Dataset for STereo And Range-based localization, arXiv:2309.05518,
// recording loop-2d-fast_s1. Its range_m is cut off at 0.1 mm.
TEST_CASE("the counters of an open recording give its ranges by the second-reply form") {
  const char* datasets = std::getenv("KEDGE_DATASETS");
  if (datasets == nullptr) {
    std::cout << "skipped: no data\n";
    return;
  }
  const auto table =
      scoring::CsvTable::read(std::filesystem::path(datasets) / "starloc_loop-2d-fast_s1" / "ranges.csv.gz");
  REQUIRE(table.ok());
  const auto column = [&](const char* name) {
    auto values = table->counts(name);
    REQUIRE(values.ok());
    return *std::move(values);
  };
  const auto tx1 = column("tx1_tick");
  const auto rx1 = column("rx1_tick");
  const auto tx2 = column("tx2_tick");
  const auto rx2 = column("rx2_tick");
  const auto tx3 = column("tx3_tick");
  const auto rx3 = column("rx3_tick");
  const auto range = table->numbers("range_m");
  REQUIRE(range.ok());
  REQUIRE(range->size() == 7602);
  double least_m = 0.0;
  double greatest_m = 0.0;
  for (std::size_t i = 0; i < range->size(); ++i) {
    const SecondReply stamps{tx1[i], rx1[i], tx2[i], rx2[i], tx3[i], rx3[i]};
    const auto computed = two_way_range_m({32, stamps}, 299702547.0);
    REQUIRE(computed.ok());
    const double cut_m = *computed - (*range)[i];
    least_m = std::min(least_m, cut_m);
    greatest_m = std::max(greatest_m, cut_m);
  }
  fmt::print("two-way counters: 7602 ranges, computed minus recorded {:.6f} to {:.6f} m\n", least_m, greatest_m);
  CHECK(least_m > -0.00001);
  CHECK(greatest_m < 0.00011);
}
