#include <catch2/catch.hpp>

#include "core/chi_square.h"

using namespace kedge;

TEST_CASE("gates are the published chi-square quantiles") {
  // NIST/SEMATECH e-Handbook of Statistical Methods, table of upper critical values of chi-square, 1 to 3
  // degrees of freedom; three decimals as printed.
  const double at_95[] = {3.841, 5.991, 7.815};
  const double at_99[] = {6.635, 9.210, 11.345};
  const double at_999[] = {10.828, 13.816, 16.266};
  for (std::size_t i = 0; i < 3; ++i) {
    CHECK(chi_square_95[i] == Approx(at_95[i]).margin(5.1e-4));
    CHECK(chi_square_99[i] == Approx(at_99[i]).margin(5.1e-4));
    CHECK(chi_square_999[i] == Approx(at_999[i]).margin(5.1e-4));
  }
  CHECK(circular_95 == Approx(2.4477).margin(5e-5));
}
