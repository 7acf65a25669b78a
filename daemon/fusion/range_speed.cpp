#include "fusion/range_speed.h"

#include <Eigen/Cholesky>
#include <Eigen/Eigenvalues>
#include <Eigen/LU>
#include <algorithm>
#include <cmath>

namespace kedge::fusion {

namespace {

using Vector4 = Eigen::Vector4d;
using Matrix4 = Eigen::Matrix4d;

// The ranges of a low-cost radio stray: a residual beyond this many sigma counts linearly (Huber).
constexpr double huber = 1.5;

/// Distance, speed and along-track distance with sigmas from the parabola's coefficients
/// (|p|^2, p.v, |v|^2) and their covariance (eq. 18).
std::optional<StraightSpeed> from_parabola(const Vector3& coefficients, const Matrix3& covariance) {
  const double distance_square = coefficients[0];
  const double product = coefficients[1];
  const double speed_square = coefficients[2];
  if (!(distance_square > 0.0) || !(speed_square > 0.0)) return std::nullopt;
  StraightSpeed result;
  result.distance_m = std::sqrt(distance_square);
  result.speed_mps = std::sqrt(speed_square);
  result.along_m = product / result.speed_mps;
  const Vector3 distance_row(0.5 / result.distance_m, 0.0, 0.0);
  const Vector3 speed_row(0.0, 0.0, 0.5 / result.speed_mps);
  const Vector3 along_row(0.0, 1.0 / result.speed_mps, -0.5 * product / (speed_square * result.speed_mps));
  result.distance_sigma_m = std::sqrt(distance_row.dot(covariance * distance_row));
  result.speed_sigma_mps = std::sqrt(speed_row.dot(covariance * speed_row));
  result.along_sigma_m = std::sqrt(along_row.dot(covariance * along_row));
  return result;
}

/// Variance of a squared range (eq. 16).
double square_variance(const RangePoint& point) {
  return 4.0 * std::max(point.range_m * point.range_m, point.sigma_m * point.sigma_m) * point.sigma_m * point.sigma_m;
}

/// Squared ranges against (1, 2 B.d, 2 B.n, |B|^2), B the path back from the newest point (eq. 23).
struct SquareFit {
  Vector2 along = Vector2::UnitX();
  bool turned = false;  ///< the second component of p is seen
  double distance_square_m2 = 0.0;
  Vector2 product = Vector2::Zero();  ///< s p, in (along, across)
  double speed_square = 0.0;
};

std::optional<SquareFit> fit_squares(const RangeWindow& window, std::size_t first) {
  const Vector2 origin = window.back().path_s;
  const auto count = static_cast<double>(window.size() - first);
  Vector2 mean = Vector2::Zero();
  Matrix2 scatter = Matrix2::Zero();
  for (std::size_t i = first; i < window.size(); ++i) mean += (window[i].path_s - origin) / count;
  for (std::size_t i = first; i < window.size(); ++i) {
    const Vector2 d = window[i].path_s - origin - mean;
    scatter += d * d.transpose() / count;
  }
  Eigen::SelfAdjointEigenSolver<Matrix2> shape;
  shape.computeDirect(scatter);
  if (!(shape.eigenvalues()[1] > 1e-2)) return std::nullopt;
  SquareFit fit;
  fit.along = shape.eigenvectors().col(1);
  if (fit.along.dot(window.back().path_s - window[first].path_s) < 0.0) fit.along = -fit.along;
  const Vector2 across(-fit.along.y(), fit.along.x());
  fit.turned = shape.eigenvalues()[0] > 0.02 * shape.eigenvalues()[1];

  Matrix4 normal = Matrix4::Zero();
  Vector4 right = Vector4::Zero();
  for (std::size_t i = first; i < window.size(); ++i) {
    const Vector2 b = window[i].path_s - origin;
    const Vector4 row(1.0, 2.0 * b.dot(fit.along), fit.turned ? 2.0 * b.dot(across) : 0.0, b.squaredNorm());
    const double weight = 1.0 / square_variance(window[i]);
    normal += weight * row * row.transpose();
    right += weight * row * window[i].range_m * window[i].range_m;
  }
  if (!fit.turned) normal(2, 2) = 1.0;
  const Vector4 solution = normal.ldlt().solve(right);
  if (!solution.allFinite() || !(solution[0] > 0.0) || !(solution[3] > 0.0)) return std::nullopt;
  fit.distance_square_m2 = solution[0];
  fit.product = Vector2(solution[1], solution[2]);
  fit.speed_square = solution[3];
  return fit;
}

/// Gauss-Newton on the ranges themselves from a seed (eq. 24).
std::optional<ShapedFit> refine(const RangeWindow& window, std::size_t first, const Vector2& position, double speed) {
  const Vector2 origin = window.back().path_s;
  ShapedFit fit;
  fit.position_m = position;
  fit.speed_mps = speed;
  Matrix3 normal;
  for (int pass = 0; pass < 8; ++pass) {
    // A weak prior keeps a course straight through the anchor solvable.
    const double loose = 1.0 / std::max(fit.position_m.squaredNorm(), 1.0);
    normal = Vector3(0.1 * loose, 0.1 * loose, 1e-3).asDiagonal();
    Vector3 gradient = Vector3::Zero();
    fit.cost = 0.0;
    for (std::size_t i = first; i < window.size(); ++i) {
      const Vector2 b = window[i].path_s - origin;
      const Vector2 at = fit.position_m + fit.speed_mps * b;
      const double distance = std::max(at.norm(), 1e-3);
      const double residual = (window[i].range_m - distance) / window[i].sigma_m;
      const double size = std::abs(residual);
      const double weight = size > huber ? huber / size : 1.0;
      const Vector2 unit = at / distance;
      const Vector3 row = Vector3(unit.x(), unit.y(), unit.dot(b)) / window[i].sigma_m;
      normal += weight * row * row.transpose();
      gradient += weight * residual * row;
      fit.cost += size > huber ? huber * (size - 0.5 * huber) : 0.5 * size * size;
    }
    const Vector3 step = normal.ldlt().solve(gradient);
    if (!step.allFinite()) return std::nullopt;
    // Not further than the distance to the anchor at once.
    const double limit = std::max(fit.position_m.norm(), 1.0) / std::max(step.head<2>().norm(), 1e-9);
    fit.position_m += std::min(1.0, limit) * step.head<2>();
    fit.speed_mps += std::min(1.0, limit) * step[2];
    if (step.norm() < 1e-6) break;
  }
  if (!(fit.speed_mps > 0.0)) return std::nullopt;
  fit.covariance = normal.inverse();
  fit.chi_square = 2.0 * fit.cost / std::max(1.0, static_cast<double>(window.size() - first) - 3.0);
  return fit;
}

}  // namespace

std::optional<StraightSpeed> three_range_speed(const std::array<RangePoint, 3>& points) {
  Matrix3 rows;
  Vector3 squares;
  Matrix3 variances = Matrix3::Zero();
  for (Eigen::Index i = 0; i < 3; ++i) {
    const RangePoint& point = points[static_cast<std::size_t>(i)];
    const double t = seconds(point.time_ns - points[2].time_ns);
    rows.row(i) << 1.0, 2.0 * t, t * t;
    squares[i] = point.range_m * point.range_m;
    variances(i, i) = square_variance(point);
  }
  if (!(std::abs(rows.determinant()) > 1e-9)) return std::nullopt;
  const Matrix3 inverse = rows.inverse();
  return from_parabola(inverse * squares, inverse * variances * inverse.transpose());
}

std::optional<StraightSpeed> least_squares_speed(const RangeWindow& window, std::size_t first) {
  if (window.size() < first + 5) return std::nullopt;
  Matrix3 normal = Matrix3::Zero();
  Vector3 right = Vector3::Zero();
  const auto row_of = [&](const RangePoint& point) {
    const double t = seconds(point.time_ns - window.back().time_ns);
    return Vector3(1.0, 2.0 * t, t * t);
  };
  for (std::size_t i = first; i < window.size(); ++i) {
    const Vector3 row = row_of(window[i]);
    const double weight = 1.0 / square_variance(window[i]);
    normal += weight * row * row.transpose();
    right += weight * row * window[i].range_m * window[i].range_m;
  }
  if (!(std::abs(normal.determinant()) > 0.0)) return std::nullopt;
  const Matrix3 covariance = normal.inverse();
  const Vector3 solution = covariance * right;
  if (!solution.allFinite() || !covariance.allFinite()) return std::nullopt;
  std::optional<StraightSpeed> result = from_parabola(solution, covariance);
  if (!result) return std::nullopt;
  for (std::size_t i = first; i < window.size(); ++i) {
    const double error = window[i].range_m * window[i].range_m - row_of(window[i]).dot(solution);
    result->chi_square += error * error / square_variance(window[i]);
  }
  result->chi_square /= static_cast<double>(window.size() - first) - 3.0;
  return result;
}

std::optional<ShapedSpeed> shaped_speed(const RangeWindow& window, std::size_t first) {
  if (window.size() < first + 8) return std::nullopt;
  const std::optional<SquareFit> squares = fit_squares(window, first);
  if (!squares) return std::nullopt;
  const double speed = std::sqrt(squares->speed_square);
  const Vector2 across(-squares->along.y(), squares->along.x());
  const double along_m = squares->product.x() / speed;
  const double across_m = squares->turned ? squares->product.y() / speed
                                          : std::sqrt(std::max(squares->distance_square_m2 - along_m * along_m, 0.0));
  std::optional<ShapedFit> left = refine(window, first, along_m * squares->along + across_m * across, speed);
  std::optional<ShapedFit> right = refine(window, first, along_m * squares->along - across_m * across, speed);
  if (!left && !right) return std::nullopt;
  if (!left || (right && right->cost < left->cost)) std::swap(left, right);
  ShapedSpeed result{*left, std::nullopt};
  if (right && (right->position_m - left->position_m).norm() > 0.1 * std::max(left->position_m.norm(), 1.0)) {
    result.mirror = right;
  }
  return result;
}

std::optional<RangeRate> range_rate(const RangeWindow& window, std::size_t first) {
  if (window.size() < first + 5) return std::nullopt;
  double weight_sum = 0.0;
  double time_sum = 0.0;
  double range_sum = 0.0;
  for (std::size_t i = first; i < window.size(); ++i) {
    const double weight = 1.0 / (window[i].sigma_m * window[i].sigma_m);
    weight_sum += weight;
    time_sum += weight * seconds(window[i].time_ns - window.back().time_ns);
    range_sum += weight * window[i].range_m;
  }
  double square = 0.0;
  double product = 0.0;
  for (std::size_t i = first; i < window.size(); ++i) {
    const double weight = 1.0 / (window[i].sigma_m * window[i].sigma_m);
    const double t = seconds(window[i].time_ns - window.back().time_ns) - time_sum / weight_sum;
    square += weight * t * t;
    product += weight * t * (window[i].range_m - range_sum / weight_sum);
  }
  if (!(square > 0.0)) return std::nullopt;
  return RangeRate{product / square, 1.0 / std::sqrt(square)};
}

std::size_t first_since(const RangeWindow& window, TimeNs from_ns) {
  std::size_t first = window.size();
  while (first > 0 && window[first - 1].time_ns >= from_ns) --first;
  return first;
}

}  // namespace kedge::fusion
