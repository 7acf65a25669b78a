#include <catch2/catch.hpp>

#include "scoring/truth.h"

using namespace kedge;
using namespace kedge::scoring;

namespace {

TruthFile truth_of(const std::string& text) {
  auto table = CsvTable::parse(text, "truth.csv");
  REQUIRE(table);
  return TruthFile(*std::move(table));
}

}  // namespace

TEST_CASE("truth of several tags, interpolated") {
  const TruthFile truth = truth_of(
      "tag,t_s,x_m,y_m,z_m,vx_mps,vy_mps\n"
      "cart-1,10.0,0,0,1,2,0\ncart-2,10.0,5,5,1,0,0\ncart-1,10.5,1,0,1,2,2\ncart-2,10.5,5,6,1,0,1\n");
  CHECK(*truth.tags() == std::vector<std::string>{"cart-1", "cart-2"});
  const auto track = truth.track("cart-1");
  REQUIRE(track);
  const auto point = track->at(10.25);
  REQUIRE(point);
  CHECK(point->position_m.isApprox(Vector3(0.5, 0, 1)));
  CHECK(point->velocity_mps.isApprox(Vector2(2, 1)));
  CHECK(track->at(10.0)->position_m.isApprox(Vector3(0, 0, 1)));
  CHECK_FALSE(track->at(9.99));
  CHECK_FALSE(track->at(10.51));
  CHECK(truth.track("cart-3").error() == "no truth for tag 'cart-3'");
  CHECK(truth.track("cart-2", 100.0)->begin_s() == 110.0);
}

TEST_CASE("rows not to be trusted and gaps are no truth") {
  const auto track =
      truth_of("t_s,x_m,y_m,ok\n0.0,0,0,1\n0.1,1,0,1\n0.2,2,0,0\n0.3,3,0,1\n0.4,4,0,1\n0.5,5,0,1\n2.0,9,0,1\n")
          .track("any");
  REQUIRE(track);
  CHECK_FALSE(track->at(0.2));
  CHECK_FALSE(track->at(0.15));
  CHECK_FALSE(track->at(0.25));
  CHECK_FALSE(track->at(1.0));
  // The difference of positions 0.1 s before and after.
  const auto point = track->at(0.4);
  REQUIRE(point);
  CHECK(point->velocity_mps.isApprox(Vector2(10, 0)));
}

TEST_CASE("antenna columns go before the rig's") {
  const TruthFile truth =
      truth_of("t_s,x_m,y_m,z_m,tag2_x_m,tag2_y_m,tag2_z_m\n0,0,0,0,1,2,3\n0.1,0,0,0,1,2,3\n0.2,0,0,0,1,2,3\n");
  CHECK(truth.tags()->empty());
  CHECK(truth.track("tag2")->at(0.1)->position_m.isApprox(Vector3(1, 2, 3)));
  CHECK(truth.track("tag1")->at(0.1)->position_m.isApprox(Vector3(0, 0, 0)));
  const TruthFile only = truth_of("t_s,x_m,y_m,tag_x_m,tag_y_m\n0,0,0,7,8\n0.1,0,0,7,8\n0.2,0,0,7,8\n");
  CHECK(only.track("mower")->at(0.1)->position_m.isApprox(Vector3(7, 8, 0)));
}

TEST_CASE("bad truth is refused with its place") {
  CHECK(truth_of("t_s,x_m\n0,1\n").track("a").error() == "truth.csv:1: no column 'y_m'; there are t_s, x_m");
  CHECK(truth_of("t_s,x_m,y_m\n0,1,1\n0,1,1\n").track("a").error() ==
        "truth.csv:3: t_s 0 does not lie after 0; rows must be in order of time");
  CHECK(truth_of("t_s,x_m,y_m\n0,1,1\n1,one,1\n").track("a").error() ==
        "truth.csv:3: column 'x_m' holds 'one' where a finite number is wanted");
  CHECK(truth_of("t_s,x_m,y_m\n").track("a").error() == "no truth for tag 'a'");
}
