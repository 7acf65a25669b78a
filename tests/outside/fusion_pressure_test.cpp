#include <catch2/catch.hpp>

#include "fusion/pressure_height.h"

TEST_CASE("pressure heights are those of the standard atmosphere") {
  // ISO 2533:1975 / ICAO Doc 7488, geopotential height.
  CHECK(kedge::fusion::standard_height_m(101325.0) == Approx(0.0).margin(1e-9));
  CHECK(kedge::fusion::standard_height_m(89874.6) == Approx(1000.0).margin(0.05));
  CHECK(kedge::fusion::standard_height_m(79495.2) == Approx(2000.0).margin(0.05));
}
