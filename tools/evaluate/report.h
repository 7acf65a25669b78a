// Figures of several tags for people and for programs.
#pragma once

#include <cstddef>
#include <string>
#include <vector>

#include "scoring/figures.h"

namespace kedge::evaluate {

struct TagFigures {
  std::string tag;
  std::size_t messages = 0;  ///< positions messages of this tag, scored or not
  scoring::Figures figures;
};

[[nodiscard]] std::string table(const std::vector<TagFigures>& rows);
/// One object a line; a figure there is no data for is null.
[[nodiscard]] std::string json_lines(const std::vector<TagFigures>& rows);

}  // namespace kedge::evaluate
