#include "fusion/position_filter.h"

#include <Eigen/Cholesky>
#include <catch2/catch.hpp>
#include <functional>
#include <numbers>
#include <random>

using namespace kedge;
using namespace kedge::fusion;

namespace {

FilterVector random_state(std::mt19937& random, double heading_error) {
  std::normal_distribution<double> normal;
  FilterVector x;
  for (Eigen::Index i = 0; i < filter_states; ++i) x[i] = 0.05 * normal(random);
  x.segment<3>(at::position) = Vector3(12.0 * normal(random), 12.0 * normal(random), normal(random));
  x.segment<3>(at::velocity) = Vector3(2.0 * normal(random), 2.0 * normal(random), 0.3 * normal(random));
  x[at::heading] = heading_error;
  return x;
}

FilterMatrix random_covariance(std::mt19937& random) {
  std::normal_distribution<double> normal;
  FilterMatrix root;
  for (Eigen::Index i = 0; i < root.size(); ++i) root.data()[i] = 0.1 * normal(random);
  return root * root.transpose() + 0.01 * FilterMatrix::Identity();
}

/// Central differences of minus the innovation, that is of the predicted measurement.
FilterVector numeric_row(const FilterVector& x, const std::function<double(const PositionFilter&)>& innovation) {
  constexpr double step = 1e-5;
  FilterVector row;
  PositionFilter filter;
  for (Eigen::Index i = 0; i < filter_states; ++i) {
    filter.x = x;
    filter.x[i] += step;
    const double above = innovation(filter);
    filter.x[i] -= 2.0 * step;
    row[i] = -wrap_angle(above - innovation(filter)) / (2.0 * step);
  }
  return row;
}

// At identity, on both sides of the series switch of the exponential, at random, near pi.
const double heading_errors[] = {0.0, 0.9e-4, 1.1e-4, 0.4, -1.3, std::numbers::pi - 1e-3, -std::numbers::pi + 1e-3};

FilterInput input_of(double heading, bool grounded) {
  FilterInput input;
  input.q_body_to_site = level_attitude(heading) * rotation_exp(Vector3(0.1, -0.2, 0.0));
  input.specific_force_mps2 = Vector3(0.6, -0.4, 9.9);
  input.lever_m = Vector3(0.3, 0.1, 0.4);
  input.antenna_up_m = 0.5;
  input.dt_s = 0.02;
  input.grounded = grounded;
  return input;
}

}  // namespace

TEST_CASE("measurement rows are the derivatives of their predictions") {
  std::mt19937 random(31);
  for (const double error : heading_errors) {
    const FilterVector x = random_state(random, error);
    PositionFilter filter;
    filter.x = x;
    const Vector3 anchor(1.0, -2.0, 4.0);
    const Vector3 lever(0.4, -0.3, 0.6);
    INFO("heading error " << error);
    const auto range = [&](const PositionFilter& f) { return f.range(anchor, lever, 10.0, 0.1).innovation; };
    CHECK((filter.range(anchor, lever, 10.0, 0.1).row - numeric_row(x, range)).norm() < 1e-7);
    for (const bool across : {false, true}) {
      const auto speed = [&](const PositionFilter& f) { return f.speed(0.7, across, 1.0, 0.1).innovation; };
      CHECK((filter.speed(0.7, across, 1.0, 0.1).row - numeric_row(x, speed)).norm() < 1e-7);
    }
    const auto field = [&](const PositionFilter& f) { return f.field(0.2, 0.03).innovation; };
    CHECK((filter.field(0.2, 0.03).row - numeric_row(x, field)).norm() < 1e-7);
  }
}

TEST_CASE("the covariance is carried by the derivative of the prediction") {
  std::mt19937 random(37);
  const FilterModel model;
  for (const bool grounded : {true, false}) {
    for (const double error : heading_errors) {
      const FilterInput input = input_of(0.7, grounded);
      const FilterVector x = random_state(random, error);
      FilterMatrix F;
      constexpr double step = 1e-5;
      for (Eigen::Index i = 0; i < filter_states; ++i) {
        PositionFilter above;
        PositionFilter below;
        above.x = below.x = x;
        above.x[i] += step;
        below.x[i] -= step;
        above.predict(model, input);
        below.predict(model, input);
        FilterVector change = above.x - below.x;
        change[at::heading] = wrap_angle(change[at::heading]);
        F.col(i) = change / (2.0 * step);
      }
      PositionFilter noise;
      noise.x = x;
      noise.P.setZero();
      noise.predict(model, input);
      PositionFilter filter;
      filter.x = x;
      filter.P = random_covariance(random);
      const FilterMatrix expected = F * filter.P * F.transpose() + noise.P;
      filter.predict(model, input);
      INFO("heading error " << error << " grounded " << grounded);
      CHECK((filter.P - expected).cwiseAbs().maxCoeff() < 1e-8);
    }
  }
}

TEST_CASE("errors of a filter on its own model stay within the chi-square bounds") {
  // NEES over 60 runs of position and velocity, 4 degrees of freedom: 240 in all; the 99.9 % interval of
  // chi-square with 240 degrees of freedom by Wilson and Hilferty (1931).
  std::mt19937 random(41);
  std::normal_distribution<double> normal;
  FilterModel model;
  model.vibration_mps2 = 0.4;
  model.accel_density_mps2_rthz = 0.0;
  model.range_bias_m = 0.0;
  model.field_sigma_rad = 0.0;
  model.slip_rad = 0.0;
  model.height_sigma_m = 0.0;
  model.accel_error_mps2 = 0.0;
  model.gyro_noise_radps_rthz = 0.0;
  const Vector3 anchors[] = {{-20, 5, 0}, {15, -18, 0}, {4, 25, 0}};
  double sum = 0.0;
  double range_sum = 0.0;
  int ranges = 0;
  constexpr int runs = 60;
  for (int run = 0; run < runs; ++run) {
    PositionFilter filter;
    filter.reset(model);
    for (const Eigen::Index state : {at::heading, at::yaw_rate, at::accel, at::accel + 1, at::accel + 2}) {
      filter.set(state, 0.0, 0.0);
    }
    Vector2 position(normal(random), normal(random));
    Vector2 velocity(0.5 * normal(random), 0.5 * normal(random));
    for (Eigen::Index i = 0; i < 2; ++i) {
      filter.set(at::position + i, 0.0, 1.0);
      filter.set(at::velocity + i, 0.0, 0.5);
    }
    filter.set(at::position + 2, 0.0, 0.0);
    FilterInput input;
    input.q_body_to_site = Quaternion::Identity();
    input.dt_s = 0.05;
    for (int k = 0; k < 400; ++k) {
      const Vector2 true_acceleration(0.3 * std::sin(0.05 * k), 0.2 * std::cos(0.03 * k));
      const Vector2 read = true_acceleration + 0.4 * Vector2(normal(random), normal(random));
      position += input.dt_s * velocity + 0.5 * input.dt_s * input.dt_s * true_acceleration;
      velocity += input.dt_s * true_acceleration;
      input.specific_force_mps2 = Vector3(read.x(), read.y(), model.gravity_mps2);
      filter.predict(model, input);
      const Vector3& anchor = anchors[k % 3];
      const double range = (position - anchor.head<2>()).norm() + 0.1 * normal(random);
      const Linearised measured = filter.range(anchor, Vector3::Zero(), range, 0.1);
      range_sum += measured.innovation * measured.innovation / filter.innovation_variance(measured);
      ++ranges;
      filter.update(measured);
    }
    Eigen::Vector4d error;
    error << filter.x.segment<2>(at::position) - position, filter.x.segment<2>(at::velocity) - velocity;
    Eigen::Matrix4d P;
    P << filter.P.block<2, 2>(0, 0), filter.P.block<2, 2>(0, 3), filter.P.block<2, 2>(3, 0), filter.P.block<2, 2>(3, 3);
    sum += error.dot(P.ldlt().solve(error));
  }
  const auto quantile = [](double dof, double z) {
    return dof * std::pow(1.0 - 2.0 / (9.0 * dof) + z * std::sqrt(2.0 / (9.0 * dof)), 3);
  };
  CHECK(sum > quantile(4.0 * runs, -3.29));
  CHECK(sum < quantile(4.0 * runs, 3.29));
  CHECK(range_sum > quantile(ranges, -3.29));
  CHECK(range_sum < quantile(ranges, 3.29));
}

TEST_CASE("a stop neither moves the position nor grows its covariance") {
  std::mt19937 random(43);
  const FilterModel model;
  PositionFilter filter;
  filter.x = random_state(random, 0.1);
  filter.P = random_covariance(random);
  FilterInput input = input_of(0.7, true);
  input.at_rest = true;
  filter.predict(model, input);
  const Vector3 position = filter.position_m();
  const double variance = filter.P.diagonal().head<2>().sum();
  const double heading_variance = filter.P(at::heading, at::heading);
  for (int k = 0; k < 60'000; ++k) filter.predict(model, input);
  CHECK((filter.position_m() - position).head<2>().norm() == 0.0);
  CHECK(filter.P.diagonal().head<2>().sum() == Approx(variance));
  CHECK(filter.P(at::heading, at::heading) == Approx(heading_variance));
  CHECK(filter.velocity_mps().norm() == 0.0);
}

TEST_CASE("an hour without inertial data stays finite and bounded") {
  const FilterModel model;
  PositionFilter filter;
  filter.reset(model);
  FilterInput input = input_of(0.7, true);
  input.blind = true;
  input.dt_s = 0.1;
  for (int k = 0; k < 36'000; ++k) filter.predict(model, input);
  CHECK(filter.healthy());
  CHECK(std::sqrt(filter.P.diagonal().maxCoeff()) < 1.1e3);
}

TEST_CASE("a measurement that is probably not one moves little and does not make the filter surer than it is") {
  PositionFilter sure;
  sure.reset(FilterModel{});
  sure.set(at::position, 10.0, 1.0);
  sure.set(at::position + 1, 0.0, 1.0);
  sure.set(at::position + 2, 0.0, 0.1);
  PositionFilter unsure = sure;
  const Linearised range = sure.range(Vector3::Zero(), Vector3::Zero(), 11.0, 0.1);
  sure.update(range, 1.0);
  unsure.update(range, 0.1);
  CHECK(unsure.position_m().x() - 10.0 == Approx(0.1 * (sure.position_m().x() - 10.0)));
  CHECK(unsure.P(0, 0) > 0.9);
  CHECK(sure.P(0, 0) < 0.1);
}
