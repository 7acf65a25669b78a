// Concerns come and go with hysteresis, so that a figure at its limit does not flicker.
#pragma once

#include <array>

#include "core/time.h"
#include "pipeline/report.h"

namespace kedge::pipeline {

/// How long a condition must hold before the concern is raised, and be gone before it is cleared.
struct Patience {
  TimeNs raise_ns = 0;
  TimeNs clear_ns = 2 * ns_per_s;
};

class ConcernBook {
 public:
  /// Notes whether the condition holds at `now_ns`, with its figure. The concern's start is the moment the
  /// condition began, not the moment it was believed.
  void note(Concern concern, bool holds, double figure, TimeNs now_ns, Patience patience = {}) {
    Page& page = pages_.at(static_cast<std::size_t>(concern));
    if (holds) {
      if (!page.holding) page.held_since_ns = now_ns;
      page.holding = true;
      page.last_held_ns = now_ns;
      page.figure = figure;
      if (!page.raised && now_ns - page.held_since_ns >= patience.raise_ns) {
        page.raised = true;
        page.since_ns = page.held_since_ns;
        changed_ = true;
      }
      return;
    }
    page.holding = false;
    if (page.raised && now_ns - page.last_held_ns >= patience.clear_ns) {
      page.raised = false;
      changed_ = true;
    }
  }

  [[nodiscard]] bool raised(Concern concern) const { return pages_.at(static_cast<std::size_t>(concern)).raised; }

  /// In the order of the enumeration.
  [[nodiscard]] Concerns list() const {
    Concerns concerns;
    for (std::size_t i = 0; i < pages_.size(); ++i) {
      if (pages_[i].raised) concerns.push_back({static_cast<Concern>(i), pages_[i].since_ns, pages_[i].figure});
    }
    return concerns;
  }

  /// Whether one was raised or cleared since the last call.
  [[nodiscard]] bool take_changed() {
    const bool changed = changed_;
    changed_ = false;
    return changed;
  }

  template <class Archive>
  void fields(Archive& archive) {
    archive(pages_, changed_);
  }

 private:
  struct Page {
    bool holding = false;
    bool raised = false;
    TimeNs held_since_ns = 0;
    TimeNs last_held_ns = 0;
    TimeNs since_ns = 0;
    double figure = 0.0;

    template <class Archive>
    void fields(Archive& archive) {
      archive(holding, raised, held_since_ns, last_held_ns, since_ns, figure);
    }
  };

  std::array<Page, concern_count> pages_{};
  bool changed_ = false;
};

}  // namespace kedge::pipeline
