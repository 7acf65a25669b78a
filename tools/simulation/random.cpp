#include "simulation/random.h"

#include <cmath>
#include <numbers>

namespace kedge::simulation {

namespace {

// The finaliser of Steele, Lea and Flood, Fast splittable pseudorandom number generators, 2014:
// neighbouring seeds and streams start far apart.
std::uint64_t mix(std::uint64_t x) {
  x += 0x9E3779B97F4A7C15U;
  x = (x ^ (x >> 30U)) * 0xBF58476D1CE4E5B9U;
  x = (x ^ (x >> 27U)) * 0x94D049BB133111EBU;
  return x ^ (x >> 31U);
}

}  // namespace

Random::Random(std::uint64_t seed, std::uint64_t stream) : engine_(mix(mix(seed) + stream)) {}

double Random::uniform() { return static_cast<double>(engine_() >> 11U) * 0x1p-53; }

double Random::normal() {
  if (has_spare_) {
    has_spare_ = false;
    return spare_;
  }
  const double radius = std::sqrt(-2.0 * std::log(1.0 - uniform()));
  const double angle_rad = 2.0 * std::numbers::pi * uniform();
  spare_ = radius * std::sin(angle_rad);
  has_spare_ = true;
  return radius * std::cos(angle_rad);
}

double Random::exponential(double mean) { return -mean * std::log(1.0 - uniform()); }

Vector3 Random::normal_vector(double sigma) {
  const double x = normal();
  const double y = normal();
  const double z = normal();
  return sigma * Vector3(x, y, z);
}

}  // namespace kedge::simulation
