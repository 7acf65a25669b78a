// The one path from record to message, the same live and in a replay: engine, then canonical stream.
#pragma once

#include <array>
#include <cstdint>
#include <functional>
#include <string_view>

#include "feed/messages.h"
#include "pipeline/engine.h"

namespace kedge::app {

inline constexpr std::size_t verdict_count = 11;

/// The verdict's word, as logs and tables print it.
[[nodiscard]] std::string_view word(pipeline::VerdictCode code);

class Conduit {
 public:
  /// Called for every packet or measurement that was refused, from within accept().
  using RefusalLog = std::function<void(const pipeline::Verdict&)>;

  /// `sink` must outlive the conduit.
  Conduit(pipeline::Settings settings, feed::MessageSink& sink, RefusalLog refusal_log = {});

  void accept(const RawRecord& record) { engine_.accept(record); }

  [[nodiscard]] const pipeline::Settings& settings() const { return settings_; }
  [[nodiscard]] std::uint64_t verdicts(pipeline::VerdictCode code) const;
  [[nodiscard]] std::uint64_t messages() const { return stream_.sequence(); }

 private:
  /// The stream, counting verdicts on the way.
  class Stream : public feed::MessageStream {
   public:
    Stream(const pipeline::Settings& settings, feed::MessageSink& sink, RefusalLog refusal_log)
        : MessageStream(settings, sink), refusal_log_(std::move(refusal_log)) {}
    void verdict(const pipeline::Verdict& verdict) override;

    std::array<std::uint64_t, verdict_count> verdicts{};

   private:
    RefusalLog refusal_log_;
  };

  const pipeline::Settings settings_;
  Stream stream_;
  pipeline::Engine engine_;
};

}  // namespace kedge::app
