#include "fusion/range_speed.h"

#include <catch2/catch.hpp>
#include <random>

using namespace kedge;
using namespace kedge::fusion;

namespace {

/// Constant velocity past an anchor at the origin: position p at time 0, the newest point.
RangePoint straight_point(const Vector2& p, const Vector2& v, double t, double sigma, double noise) {
  RangePoint point;
  point.time_ns = from_seconds(1000.0 + t);
  point.range_m = (p + t * v).norm() + noise;
  point.sigma_m = sigma;
  point.path_s = t * v.normalized();
  return point;
}

const Vector2 p(14.0, 9.0);
const Vector2 v(1.6, -0.9);

}  // namespace

TEST_CASE("three noise-free ranges give distance, speed and along-track position exactly") {
  const auto result = three_range_speed({straight_point(p, v, -6.0, 0.1, 0.0), straight_point(p, v, -2.5, 0.1, 0.0),
                                         straight_point(p, v, 0.0, 0.1, 0.0)});
  REQUIRE(result);
  CHECK(result->distance_m == Approx(p.norm()).epsilon(1e-9));
  CHECK(result->speed_mps == Approx(v.norm()).epsilon(1e-9));
  CHECK(result->along_m == Approx(p.dot(v) / v.norm()).epsilon(1e-9));
}

TEST_CASE("three ranges at one time, or of no forward motion, give nothing") {
  const RangePoint still = straight_point(p, v, 0.0, 0.1, 0.0);
  CHECK_FALSE(three_range_speed({still, still, still}));
  RangePoint bent = straight_point(p, v, -2.5, 0.1, 3.0);  // a middle range too long makes the square negative
  CHECK_FALSE(three_range_speed({straight_point(p, v, -5.0, 0.1, 0.0), bent, still}));
}

TEST_CASE("the sigmas of both straight forms are those of repeated draws") {
  std::mt19937 random(21);
  std::normal_distribution<double> normal;
  constexpr double sigma = 0.05;
  constexpr int draws = 4000;
  double three_square = 0.0;
  double three_claimed = 0.0;
  double fit_square = 0.0;
  double fit_claimed = 0.0;
  double along_square = 0.0;
  double along_claimed = 0.0;
  double chi_square = 0.0;
  for (int i = 0; i < draws; ++i) {
    RangeWindow window;
    for (int k = 0; k <= 60; ++k) {
      window.push_back(straight_point(p, v, -6.0 + 0.1 * k, sigma, sigma * normal(random)));
    }
    const auto three = three_range_speed({window[0], window[30], window[60]});
    const auto fit = least_squares_speed(window, 0);
    REQUIRE(three);
    REQUIRE(fit);
    three_square += std::pow(three->speed_mps - v.norm(), 2) / draws;
    three_claimed += std::pow(three->speed_sigma_mps, 2) / draws;
    fit_square += std::pow(fit->speed_mps - v.norm(), 2) / draws;
    fit_claimed += std::pow(fit->speed_sigma_mps, 2) / draws;
    along_square += std::pow(fit->along_m - p.dot(v) / v.norm(), 2) / draws;
    along_claimed += std::pow(fit->along_sigma_m, 2) / draws;
    chi_square += fit->chi_square / draws;
  }
  // The variance of 4000 draws is known to 2.2 %, 1 sigma; linearisation adds a little.
  CHECK(three_square == Approx(three_claimed).epsilon(0.12));
  CHECK(fit_square == Approx(fit_claimed).epsilon(0.10));
  CHECK(along_square == Approx(along_claimed).epsilon(0.10));
  CHECK(chi_square == Approx(1.0).epsilon(0.05));
  // "Two to six times better" than three ranges (common practice, no source).
  CHECK(three_square > 4.0 * fit_square);
}

TEST_CASE("the three-range sigma follows sqrt(6) r s / (2 T^2 v) at the nearest point") {
  // Half-window T, range r, range sigma s: common practice, no source; exact for equal r.
  const double r = 40.0;
  const double half = 3.0;
  const Vector2 across(1.5, 0.0);
  const Vector2 newest = Vector2(0.0, r) + half * across;
  const auto result = three_range_speed({straight_point(newest, across, -2.0 * half, 0.1, 0.0),
                                         straight_point(newest, across, -half, 0.1, 0.0),
                                         straight_point(newest, across, 0.0, 0.1, 0.0)});
  REQUIRE(result);
  CHECK(result->speed_sigma_mps == Approx(std::sqrt(6.0) * r * 0.1 / (2.0 * half * half * 1.5)).epsilon(0.01));
}

TEST_CASE("a straight path leaves two mirror positions, reflections in the line along the course") {
  RangeWindow window;
  for (int k = 0; k <= 60; ++k) window.push_back(straight_point(p, v, -6.0 + 0.1 * k, 0.1, 0.0));
  const auto fit = shaped_speed(window, 0);
  REQUIRE(fit);
  REQUIRE(fit->mirror);
  const Vector2 along = v.normalized();
  const Vector2 reflected = 2.0 * along * along.dot(p) - p;
  const bool best_is_truth = (fit->best.position_m - p).norm() < (fit->mirror->position_m - p).norm();
  const ShapedFit& truth = best_is_truth ? fit->best : *fit->mirror;
  const ShapedFit& image = best_is_truth ? *fit->mirror : fit->best;
  CHECK((truth.position_m - p).norm() < 0.02);
  CHECK((image.position_m - reflected).norm() < 0.02);
  CHECK(truth.speed_mps == Approx(v.norm()).epsilon(1e-3));
  CHECK(std::abs(truth.cost - image.cost) < 0.01);
}

TEST_CASE("a turn tells the side and the shaped form gives position and speed in one") {
  RangeWindow window;
  const double speed = 1.8;
  Vector2 path = Vector2::Zero();
  std::vector<Vector2> paths;
  for (int k = 0; k <= 60; ++k) {
    const double heading = k < 30 ? 0.3 : 0.3 + radians(60.0) * (k - 30) / 30.0;
    paths.push_back(path);
    path += 0.1 * Vector2(std::cos(heading), std::sin(heading));
  }
  const Vector2 begin(-8.0, 15.0);
  for (int k = 0; k <= 60; ++k) {
    RangePoint point;
    point.time_ns = from_seconds(0.1 * k);
    point.path_s = paths[k];
    point.range_m = (begin + speed * paths[k]).norm();
    point.sigma_m = 0.1;
    window.push_back(point);
  }
  const auto fit = shaped_speed(window, 0);
  REQUIRE(fit);
  CHECK((fit->best.position_m - (begin + speed * paths.back())).norm() < 0.05);
  CHECK(fit->best.speed_mps == Approx(speed).epsilon(0.005));
  // What else fits, fits visibly worse.
  if (fit->mirror) CHECK(fit->mirror->cost > fit->best.cost + 3.0);
}

TEST_CASE("range rate and its sigma") {
  RangeWindow window;
  for (int k = 0; k < 21; ++k) {
    RangePoint point;
    point.time_ns = from_seconds(0.1 * k);
    point.range_m = 20.0 - 0.7 * 0.1 * k;
    point.sigma_m = 0.1;
    window.push_back(point);
  }
  const auto rate = range_rate(window, 0);
  REQUIRE(rate);
  CHECK(rate->rate_mps == Approx(-0.7));
  // Slope of a straight line through 21 points 0.1 s apart: s / sqrt(sum t^2), sum = 0.01 * 770.
  CHECK(rate->sigma_mps == Approx(0.1 / std::sqrt(7.70)));
  CHECK_FALSE(range_rate(window, 18));
}

TEST_CASE("ranges that are one and the same point ask for no answer and get none") {
  RangeWindow window;
  RangePoint point;
  point.range_m = 10.0;
  point.sigma_m = 0.1;
  for (int k = 0; k < 20; ++k) window.push_back(point);
  CHECK_FALSE(least_squares_speed(window, 0));
  CHECK_FALSE(shaped_speed(window, 0));
  CHECK_FALSE(range_rate(window, 0));
  CHECK_FALSE(shaped_speed(RangeWindow{}, 0));
}
