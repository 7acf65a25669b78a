// The one function everything passes.
//
// Live or replayed, each record goes through Engine::accept in the order of acceptance, and what comes
// out depends on the records and the settings alone. The engine asks no clock, opens nothing, and owns
// no thread; it may be called from one thread at a time.
#pragma once

#include <memory>

#include "core/archive.h"
#include "core/record.h"
#include "core/result.h"
#include "pipeline/report.h"
#include "pipeline/settings.h"
#include "pipeline/track.h"

namespace kedge::pipeline {

class Engine {
 public:
  /// `sink` must outlive the engine. Every tag's estimator comes from `factory`.
  Engine(Settings settings, ReportSink& sink, const EstimatorFactory& factory = fusion::make_estimator);
  ~Engine();
  Engine(const Engine&) = delete;
  Engine& operator=(const Engine&) = delete;

  /// Takes one record and publishes what follows from it. Bad bytes get a verdict, never an exception.
  void accept(const RawRecord& record);

  [[nodiscard]] const Settings& settings() const;

  /// The whole state, for a checkpoint: an engine with the same settings that loads it goes on to the
  /// same reports. A load that fails says why and leaves a state that only a further load may use.
  void save(Saver& saver);
  [[nodiscard]] Status load(std::span<const std::byte> bytes);

 private:
  class State;
  std::unique_ptr<State> state_;
};

}  // namespace kedge::pipeline
