// A message file as tables: positions, speeds and health, a row for each message.
#pragma once

#include <cstdint>
#include <filesystem>
#include <string>

#include "core/result.h"
#include "scoring/messages.h"

namespace kedge::convert {

struct FromMessages {
  scoring::MessagesRead read;
  std::uint64_t position_rows = 0;
  std::uint64_t speed_rows = 0;
  std::uint64_t health_rows = 0;
};

/// Writes positions.csv, speeds.csv and health.csv, those that have rows. Columns are the fields of the messages by
/// their names (those of an inner message after its own name), before them `t_s`; what is absent is empty.
[[nodiscard]] Result<FromMessages> write_message_tables(const std::filesystem::path& messages,
                                                        const std::filesystem::path& folder);

}  // namespace kedge::convert
