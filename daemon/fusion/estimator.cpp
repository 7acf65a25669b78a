#include "fusion/estimator.h"

#include "fusion/standard_tracker.h"
#include "fusion/tracker.h"

namespace kedge::fusion {

std::unique_ptr<Estimator> make_estimator(const Site& site, const Tag& tag) {
  if (tag.method == Method::mixture) return std::make_unique<StandardTracker>(site, tag);
  return std::make_unique<Tracker>(site, tag);
}

}  // namespace kedge::fusion
