#include "simulation/wander.h"

#include <cmath>
#include <numbers>

namespace kedge::simulation {

Wander::Wander(Random random, double sigma, double period_min, double period_max) {
  const double amplitude = sigma * std::sqrt(2.0 / static_cast<double>(waves_.size()));
  for (Wave& wave : waves_) {
    const double period = period_min * std::pow(period_max / period_min, random.uniform());
    wave = {amplitude, 2.0 * std::numbers::pi / period, 2.0 * std::numbers::pi * random.uniform()};
  }
}

double Wander::value(double x) const {
  double sum = 0.0;
  for (const Wave& wave : waves_) sum += wave.amplitude * std::sin(wave.wavenumber * x + wave.phase_rad);
  return sum;
}

double Wander::slope(double x) const {
  double sum = 0.0;
  for (const Wave& wave : waves_) {
    sum += wave.amplitude * wave.wavenumber * std::cos(wave.wavenumber * x + wave.phase_rad);
  }
  return sum;
}

double Wander::integral(double x) const {
  double sum = 0.0;
  for (const Wave& wave : waves_) {
    sum -= wave.amplitude / wave.wavenumber * std::cos(wave.wavenumber * x + wave.phase_rad);
  }
  return sum;
}

}  // namespace kedge::simulation
