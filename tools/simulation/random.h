// Random numbers that are the same on every machine.
//
// The standard fixes what std::mt19937_64 yields but not how its distributions use it, so the
// distributions stand here. Every fault draws from a stream of its own: switching one fault off
// leaves the draws of all others as they were.
#pragma once

#include <cstdint>
#include <random>

#include "core/rotation.h"

namespace kedge::simulation {

class Random {
 public:
  /// Streams of one seed with different numbers are unrelated.
  Random(std::uint64_t seed, std::uint64_t stream);

  /// In [0, 1), 53 bits.
  double uniform();
  double uniform(double low, double high) { return low + (high - low) * uniform(); }
  /// Standard normal (Box and Muller, 1958).
  double normal();
  double exponential(double mean);
  bool chance(double probability) { return uniform() < probability; }
  std::uint64_t bits() { return engine_(); }
  /// Three independent normals of this sigma.
  Vector3 normal_vector(double sigma);

 private:
  std::mt19937_64 engine_;
  double spare_ = 0.0;
  bool has_spare_ = false;
};

}  // namespace kedge::simulation
