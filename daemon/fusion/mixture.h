// Many hypotheses about one tag: a sum of Gaussians, each a full filter with its weight.
//
// The start is a bank of them, spread so that each is narrow enough for a linearised update; evidence thins
// them, alike ones merge, and what is said outside is the heaviest cluster and the one after it, since the
// confidence in a place is the summed weight of all that lie there (MATHEMATICS.md, eq. 59 to 64).
#pragma once

#include <array>
#include <cstddef>
#include <optional>
#include <vector>

#include "fusion/full_filter.h"

namespace kedge::fusion {

struct Component {
  FullFilter filter;
  double weight = 0.0;

  template <class Archive>
  void fields(Archive& archive) {
    archive(filter, weight);
  }
};

/// Several components taken as one Gaussian: position and velocity of the antenna.
struct Cluster {
  double weight = 0.0;
  Vector3 position_m = Vector3::Zero();
  Matrix3 position_covariance_m2 = Matrix3::Zero();
  Vector3 velocity_mps = Vector3::Zero();
  Matrix3 velocity_covariance_m2ps2 = Matrix3::Zero();
};

struct Clusters {
  Cluster lead;
  std::optional<Cluster> second;  ///< the heaviest of the rest
};

class Mixture {
 public:
  static constexpr std::size_t capacity = 320;
  using LogLikelihoods = std::array<double, capacity>;

  /// The memory is taken here, once; copying copies only what lives.
  Mixture() { components_.reserve(capacity); }
  Mixture(const Mixture& other) : Mixture() { components_.assign(other.components_.begin(), other.components_.end()); }
  Mixture& operator=(const Mixture& other) {
    if (this != &other) components_.assign(other.components_.begin(), other.components_.end());
    return *this;
  }
  ~Mixture() = default;

  [[nodiscard]] std::size_t size() const { return components_.size(); }
  [[nodiscard]] bool empty() const { return components_.empty(); }
  [[nodiscard]] bool full() const { return components_.size() == capacity; }
  void clear() { components_.clear(); }
  /// Precondition: not full.
  void add(const Component& component);
  /// Keeps the first alone.
  void keep_lead();
  /// Precondition: not empty.
  void drop_lightest();

  [[nodiscard]] auto begin() { return components_.begin(); }
  [[nodiscard]] auto end() { return components_.end(); }
  [[nodiscard]] auto begin() const { return components_.begin(); }
  [[nodiscard]] auto end() const { return components_.end(); }
  [[nodiscard]] Component& operator[](std::size_t i) { return components_[i]; }
  [[nodiscard]] const Component& operator[](std::size_t i) const { return components_[i]; }
  /// The heaviest, once order() ran. Precondition: not empty.
  [[nodiscard]] Component& lead() { return components_.front(); }
  [[nodiscard]] const Component& lead() const { return components_.front(); }

  /// Multiplies the weights by likelihoods, counted for a share of what they say, and makes their sum 1 again (eq. 59).
  void reweigh(const LogLikelihoods& log_likelihoods, double share = 1.0);
  void normalise();
  /// The heaviest comes first.
  void order();
  /// Drops what is lighter than a share of the heaviest, merges what is alike (eq. 60, 61).
  void thin(double share_min);

  /// Precondition: not empty, ordered. rate_radps: angular rate, body axes.
  [[nodiscard]] Clusters clusters(const Vector3& lever_m, const Vector3& rate_radps) const;

  template <class Archive>
  void fields(Archive& archive) {
    std::size_t count = components_.size();
    archive(count);
    if constexpr (Archive::loading) {
      components_.clear();
      if (count > capacity) {
        archive.fail();
        return;
      }
      components_.resize(count);
    }
    for (Component& component : components_) archive(component);
  }

 private:
  std::vector<Component> components_;
};

/// Takes two components as one with the same mean and covariance (eq. 61).
[[nodiscard]] Component merged(const Component& a, const Component& b);

/// Three narrower components in place of one, apart along a direction of the level position: mean and covariance of the
/// whole stay (eq. 62). direction: unit, level.
[[nodiscard]] std::array<Component, 3> split(const Component& whole, const Vector2& direction);

/// The mirror image in the vertical plane through the anchor along a level course: what ranges on a straight line
/// cannot tell from the original (eq. 63).
[[nodiscard]] Component reflected(const Component& original, const Vector3& anchor_m, const Vector2& course);

}  // namespace kedge::fusion
