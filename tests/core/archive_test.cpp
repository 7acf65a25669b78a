#include "core/archive.h"

#include <catch2/catch.hpp>

#include "core/ring.h"

using namespace kedge;

namespace {

struct State {
  std::int64_t time_ns = 0;
  Eigen::Matrix3d matrix = Eigen::Matrix3d::Zero();
  Eigen::Quaterniond q = Eigen::Quaterniond::Identity();
  std::optional<double> maybe;
  Ring<int, 4> ring;
  std::vector<float> list;
  bool flag = false;

  template <class Archive>
  void fields(Archive& archive) {
    archive(time_ns, matrix, q, maybe, ring, list, flag);
  }
};

State sample() {
  State s;
  s.time_ns = -7;
  s.matrix << 1, 2, 3, 4, 5, 6, 7, 8, 9;
  s.q = Eigen::Quaterniond(0.5, -0.5, 0.5, -0.5);
  s.maybe = 0.1;
  for (int i = 0; i < 6; ++i) s.ring.push_back(i);
  s.list = {1.5F, 2.5F};
  s.flag = true;
  return s;
}

}  // namespace

TEST_CASE("a state comes back bit for bit") {
  State before = sample();
  Saver saver;
  saver(before);
  State after;
  Loader loader(saver.bytes());
  loader(after);
  REQUIRE(loader.ok());
  CHECK(loader.left() == 0);
  CHECK(after.time_ns == -7);
  CHECK(after.matrix == before.matrix);
  CHECK(after.q.coeffs() == before.q.coeffs());
  CHECK(after.maybe == before.maybe);
  REQUIRE(after.ring.size() == 4);
  CHECK(after.ring.front() == 2);
  CHECK(after.ring.back() == 5);
  CHECK(after.list == before.list);
  CHECK(after.flag);
}

TEST_CASE("a state cut anywhere is refused, never read beyond") {
  State before = sample();
  Saver saver;
  saver(before);
  for (std::size_t length = 0; length < saver.bytes().size(); ++length) {
    State after;
    Loader loader(std::span(saver.bytes()).first(length));
    loader(after);
    CHECK_FALSE(loader.ok());
  }
}

TEST_CASE("a count larger than the input cannot ask for memory") {
  Saver saver;
  std::uint64_t lie = 1ULL << 60U;
  saver(lie);
  std::vector<float> list;
  Loader loader(saver.bytes());
  loader(list);
  CHECK_FALSE(loader.ok());
  CHECK(list.empty());
}
