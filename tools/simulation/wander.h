// A slow, smooth random function: a sum of sinusoids with random phases.
//
// Ground, wheels and pilots wander without steps, and the inertial unit feels the derivatives. Unlike
// a random walk this is a pure function of its argument with derivatives of every order, so the truth
// can be asked at any time.
#pragma once

#include <array>

#include "simulation/random.h"

namespace kedge::simulation {

class Wander {
 public:
  /// Root mean square `sigma` over a long stretch; periods between the two, in the argument's unit.
  Wander(Random random, double sigma, double period_min, double period_max);

  [[nodiscard]] double value(double x) const;
  [[nodiscard]] double slope(double x) const;
  [[nodiscard]] double integral(double x) const;  ///< an antiderivative, bounded

 private:
  struct Wave {
    double amplitude = 0.0;
    double wavenumber = 1.0;
    double phase_rad = 0.0;
  };
  std::array<Wave, 7> waves_;
};

}  // namespace kedge::simulation
