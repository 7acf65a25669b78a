#include <catch2/catch.hpp>
#include <functional>
#include <random>

#include "fusion/full_filter.h"
#include "fusion/mixture.h"

using namespace kedge;
using namespace kedge::fusion;

namespace {

const Vector3 anchor(1.0, -2.0, 4.0);
const Vector3 lever(0.3, -0.1, 0.4);

FullModel model() { return {}; }

/// A filter somewhere, with correlations everywhere.
FullFilter drawn(std::mt19937_64& random) {
  std::normal_distribution<double> normal;
  const auto vector = [&](double sigma) {
    return Vector3(sigma * normal(random), sigma * normal(random), sigma * normal(random));
  };
  FullFilter filter;
  filter.reset(model(), anchor);
  filter.position_m = anchor + vector(15.0);
  filter.velocity_mps = vector(1.5);
  filter.q_body_to_site = rotation_exp(vector(0.8));
  for (Eigen::Index i = 0; i < filter.biases.size(); ++i) filter.biases[i] = 0.02 * normal(random);
  FullMatrix root;
  for (Eigen::Index i = 0; i < root.size(); ++i) root.data()[i] = 0.05 * normal(random);
  filter.P = root * root.transpose() + 1e-3 * FullMatrix::Identity();
  return filter;
}

FullVector axis(Eigen::Index i, double size) {
  FullVector v = FullVector::Zero();
  v[i] = size;
  return v;
}

/// The row by central differences: the innovation falls as the predicted value rises.
FullVector numeric_row(const FullFilter& filter, const std::function<double(const FullFilter&)>& innovation) {
  constexpr double step = 1e-5;
  FullVector row;
  for (Eigen::Index i = 0; i < full_states; ++i) {
    FullFilter up = filter;
    FullFilter down = filter;
    up.correct(axis(i, step));
    down.correct(axis(i, -step));
    row[i] = -(innovation(up) - innovation(down)) / (2.0 * step);
  }
  return row;
}

}  // namespace

TEST_CASE("rows of the full filter's measurements against central differences") {
  std::mt19937_64 random(3);
  for (int draw = 0; draw < 20; ++draw) {
    const FullFilter filter = drawn(random);
    const Vector3 gyro(0.3, -0.2, 0.5);
    const Vector3 field(18.0, 5.0, -40.0);
    const std::vector<std::function<FullLinearised(const FullFilter&)>> measurements = {
        [&](const FullFilter& f) { return f.range(anchor + Vector3(3.0, 8.0, 1.0), lever, 12.0, 0.1); },
        [&](const FullFilter& f) { return f.range(anchor, lever, 12.0, 0.1); },
        [&](const FullFilter& f) { return f.speed(0, lever, gyro - f.gyro_bias_radps(), 1.0, 0.1); },
        [&](const FullFilter& f) { return f.speed(1, lever, gyro - f.gyro_bias_radps(), 0.0, 0.1); },
        [&](const FullFilter& f) { return f.speed(2, lever, gyro - f.gyro_bias_radps(), 0.0, 0.1); },
        [&](const FullFilter& f) { return f.field(field, 1.5, 0.03); },
        [&](const FullFilter& f) { return f.height(lever, 0.5, 0.1, false); },
        [&](const FullFilter& f) { return f.height(lever, 0.5, 0.1, true); },
        [&](const FullFilter& f) { return f.velocity(1, 0.0, 0.03); },
    };
    for (std::size_t m = 0; m < measurements.size(); ++m) {
      const FullVector expected =
          numeric_row(filter, [&](const FullFilter& f) { return measurements[m](f).innovation; });
      INFO("draw " << draw << ", measurement " << m);
      CHECK((measurements[m](filter).row - expected).norm() < 1e-5 * (1.0 + expected.norm()));
    }
  }
}

TEST_CASE("the covariance follows the nominal state: transition against central differences") {
  std::mt19937_64 random(4);
  FullModel quiet = model();
  quiet.accel_density_mps2_rthz = 0.0;
  quiet.gyro_density_radps_rthz = 0.0;
  for (int draw = 0; draw < 10; ++draw) {
    const FullFilter before = drawn(random);
    const Vector3 force(0.4, -0.3, 9.9);
    const Vector3 rate(0.1, 0.05, 0.4);
    constexpr double dt_s = 0.01;
    FullFilter after = before;
    after.move(quiet, force, rate, dt_s);
    // Moved states, seen from the moved nominal one.
    constexpr double step = 1e-4;
    FullMatrix F;
    for (Eigen::Index i = 0; i < full_states; ++i) {
      FullFilter up = before;
      FullFilter down = before;
      up.correct(axis(i, step));
      down.correct(axis(i, -step));
      up.move(quiet, force, rate, dt_s);
      down.move(quiet, force, rate, dt_s);
      F.col(i) = (after.difference_to(up) - after.difference_to(down)) / (2.0 * step);
    }
    const FullMatrix expected = F * before.P * F.transpose();
    after.catch_up(quiet, false, true);
    // Wandering states decay and gain noise: compared are the first 15.
    const auto moved = after.P.topLeftCorner<15, 15>();
    CHECK((moved - expected.topLeftCorner<15, 15>()).cwiseAbs().maxCoeff() < 2e-4);
    CHECK(after.healthy());
  }
}

TEST_CASE("plain and turning errors: one covariance in two coordinates") {
  std::mt19937_64 random(5);
  FullFilter filter = drawn(random);
  const FullMatrix own = filter.P;
  const FullMatrix plain = filter.plain_covariance();
  // Small errors drawn in the filter's coordinates show up as plain differences.
  constexpr double step = 1e-6;
  FullMatrix T;
  for (Eigen::Index i = 0; i < full_states; ++i) {
    FullFilter moved = filter;
    moved.correct(axis(i, step));
    FullVector difference = filter.difference_to(moved);
    difference.segment<3>(in::position) = moved.position_m - filter.position_m;
    difference.segment<3>(in::velocity) = moved.velocity_mps - filter.velocity_mps;
    T.col(i) = difference / step;
  }
  CHECK((T * own * T.transpose() - plain).cwiseAbs().maxCoeff() < 1e-4);
  filter.set_plain_covariance(plain);
  CHECK((filter.P - own).cwiseAbs().maxCoeff() < 1e-9);
  CHECK((filter.level_covariance().topLeftCorner<2, 2>() - plain.topLeftCorner<2, 2>()).norm() < 1e-9);
}

TEST_CASE("ranges to the pivot teach nothing about the turn around it, however the state jumps") {
  std::mt19937_64 random(6);
  std::normal_distribution<double> normal;
  FullFilter filter = drawn(random);
  filter.P = FullMatrix::Identity() * 0.01;
  filter.P(in::heading, in::heading) = 0.04;
  for (int i = 0; i < 200; ++i) {
    filter.move(model(), Vector3(0.2 * normal(random), 0.2 * normal(random), 9.8), Vector3(0, 0, 0.3), 0.05);
    filter.catch_up(model(), true, false);
    const double predicted = (filter.position_m - anchor).norm();
    // Innovations of three sigma move the linearisation point about.
    filter.update(
        filter.range(anchor, Vector3::Zero(), predicted + filter.bias(in::range_bias) + 0.3 * normal(random), 0.1));
  }
  // Observability: Huang, Mourikis, Roumeliotis, IJRR 29, 2010. Tilt may still be learnt, yaw may not.
  CHECK(filter.P(in::heading, in::heading) > 0.04);
}

TEST_CASE("merging keeps mean and covariance; splitting keeps both and is undone by merging") {
  std::mt19937_64 random(7);
  const FullFilter filter = drawn(random);
  Component whole{filter, 0.4};
  const Vector2 direction = Vector2(0.6, 0.8);
  const std::array<Component, 3> parts = split(whole, direction);
  double weight = 0.0;
  for (const Component& part : parts) {
    weight += part.weight;
    CHECK(part.filter.healthy());
    CHECK(direction.dot(part.filter.P.topLeftCorner<2, 2>() * direction) <
          0.5 * direction.dot(filter.P.topLeftCorner<2, 2>() * direction));
  }
  CHECK(weight == Approx(0.4));
  const Component again = merged(merged(parts[0], parts[1]), parts[2]);
  CHECK(again.weight == Approx(0.4));
  CHECK(filter.difference_to(again.filter).norm() < 1e-2);
  CHECK((again.filter.P - filter.P).norm() < 0.02 * filter.P.norm());
}

TEST_CASE("a mirror image has the same ranges as long as the course is straight, and twice mirrored is the original") {
  std::mt19937_64 random(8);
  Component original{drawn(random), 0.5};
  original.filter.velocity_mps = Vector3(1.2, 0.5, 0.0);
  const Vector2 course = original.filter.velocity_mps.head<2>();
  const Component image = reflected(original, anchor, course);
  for (const double t_s : {0.0, 1.0, 7.0}) {
    const auto range = [&](const FullFilter& f) { return (f.position_m + t_s * f.velocity_mps - anchor).norm(); };
    CHECK(range(image.filter) == Approx(range(original.filter)));
  }
  const double s = original.filter.innovation_variance(original.filter.range(anchor, Vector3::Zero(), 10.0, 0.1));
  CHECK(image.filter.innovation_variance(image.filter.range(anchor, Vector3::Zero(), 10.0, 0.1)) == Approx(s));
  const Component twice = reflected(image, anchor, course);
  CHECK((twice.filter.position_m - original.filter.position_m).norm() < 1e-9);
  CHECK((twice.filter.P - original.filter.P).norm() < 1e-9);
}

TEST_CASE("clusters: two heaps are told apart and their weights summed; wide parts join") {
  Mixture mixture;
  Component component;
  component.filter.reset(model(), anchor);
  component.filter.P = FullMatrix::Identity() * 0.01;
  component.filter.P.diagonal().segment<3>(in::rotation).setConstant(1e-8);
  const auto add = [&](double east_m, double weight) {
    component.filter.position_m = Vector3(east_m, 0.0, 0.5);
    component.weight = weight;
    mixture.add(component);
  };
  add(10.0, 0.3);
  add(10.2, 0.25);
  add(-10.0, 0.4);
  add(-9.8, 0.05);
  mixture.order();
  const Clusters clusters = mixture.clusters(Vector3::Zero(), Vector3::Zero());
  REQUIRE(clusters.second);
  // The heaviest component is on the one side, the heaviest heap on the other.
  CHECK(clusters.lead.weight == Approx(0.55));
  CHECK(clusters.lead.position_m.x() == Approx((0.3 * 10.0 + 0.25 * 10.2) / 0.55));
  CHECK(clusters.second->weight == Approx(0.45));
  CHECK(clusters.lead.position_covariance_m2(0, 0) > 0.01);

  mixture.thin(1e-5);
  CHECK(mixture.size() == 4);  // 0.2 m apart at 0.1 m each: not alike
}
