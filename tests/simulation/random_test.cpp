#include <algorithm>
#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <random>

#include "simulation/random.h"
#include "simulation/wander.h"

using kedge::simulation::Random;
using kedge::simulation::Wander;

namespace {

// 99.9 % point of chi-square with 19 degrees of freedom: NIST/SEMATECH e-Handbook, chi-square table.
constexpr double chi_square_19_999 = 43.820;
constexpr std::size_t bins = 20;
constexpr int draws = 200'000;

template <class Draw>
double bin_statistic(Draw draw) {
  std::array<int, bins> counts{};
  for (int i = 0; i < draws; ++i) {
    ++counts.at(std::min(bins - 1, static_cast<std::size_t>(draw() * static_cast<double>(bins))));
  }
  const double expected = static_cast<double>(draws) / bins;
  double statistic = 0.0;
  for (const int count : counts) statistic += (count - expected) * (count - expected) / expected;
  return statistic;
}

}  // namespace

TEST_CASE("the engine is the one of the standard") {
  // ISO/IEC 14882:2020 [rand.predef]: the 10000th number of a default-made mt19937_64.
  std::mt19937_64 engine;
  engine.discard(9999);
  CHECK(engine() == 9981545732273789042U);
}

TEST_CASE("distributions have their shape") {
  const std::uint64_t seed = GENERATE(1U, 2U, 777U);
  INFO("seed " << seed);
  Random random(seed, 5);
  CHECK(bin_statistic([&] { return random.uniform(); }) < chi_square_19_999);
  // Through its distribution function a draw becomes uniform.
  CHECK(bin_statistic([&] { return 0.5 * std::erfc(-random.normal() / std::sqrt(2.0)); }) < chi_square_19_999);
  CHECK(bin_statistic([&] { return 1.0 - std::exp(-random.exponential(0.7) / 0.7); }) < chi_square_19_999);
}

TEST_CASE("streams of one seed and seeds of one stream are unrelated") {
  Random a(1, 1);
  Random b(1, 2);
  Random c(2, 1);
  double ab = 0.0;
  double ac = 0.0;
  constexpr int n = 20'000;
  for (int i = 0; i < n; ++i) {
    const double x = a.normal();
    ab += x * b.normal() / n;
    ac += x * c.normal() / n;
  }
  // The correlation of n unrelated pairs has sigma 1 / sqrt(n).
  CHECK(std::abs(ab) < 4.0 / std::sqrt(n));
  CHECK(std::abs(ac) < 4.0 / std::sqrt(n));
}

TEST_CASE("a wander has its root mean square, and its slope and integral fit") {
  const Wander wander(Random(3, 1), 0.2, 5.0, 40.0);
  double squares = 0.0;
  constexpr int n = 200'000;
  for (int i = 0; i < n; ++i) squares += std::pow(wander.value(0.37 * i), 2) / n;
  CHECK(std::sqrt(squares) == Approx(0.2).epsilon(0.01));
  for (const double x : {0.0, 3.3, 71.0}) {
    constexpr double h = 1e-4;
    CHECK(wander.slope(x) == Approx((wander.value(x + h) - wander.value(x - h)) / (2 * h)).margin(1e-8));
    CHECK(wander.value(x) == Approx((wander.integral(x + h) - wander.integral(x - h)) / (2 * h)).margin(1e-8));
  }
}
