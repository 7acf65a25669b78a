#include "config/load.h"

#include <algorithm>
#include <map>
#include <tuple>
#include <utility>

#include "config/check.h"
#include "config/source.h"

namespace kedge::config {
namespace {

Loaded finish(Source source) {
  Loaded loaded;
  std::vector<Problem> problems = source.syntax.empty() ? check(source) : std::move(source.syntax);
  // Files stay in the order in which they first come up.
  std::map<std::string, std::size_t> order;
  for (const Problem& problem : problems) order.emplace(problem.place.file, order.size());
  std::stable_sort(problems.begin(), problems.end(), [&](const Problem& a, const Problem& b) {
    const auto key = [&](const Place& place) { return std::tuple(order.at(place.file), place.line, place.column); };
    return key(a.place) < key(b.place);
  });
  for (const Problem& problem : problems) loaded.errors.push_back(text_of(problem.place) + ": " + problem.text);
  if (loaded.errors.empty()) loaded.merged = std::move(source.merged);
  return loaded;
}

}  // namespace

Loaded load(const std::filesystem::path& path) { return finish(read_files(path)); }

Loaded load_text(std::string_view text, std::string_view name) { return finish(read_text(text, name)); }

}  // namespace kedge::config
