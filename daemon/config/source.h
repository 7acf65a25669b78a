// Text into one merged configuration that remembers where each field was written.
#pragma once

#include <filesystem>
#include <map>
#include <string>
#include <string_view>
#include <vector>

#include "proto/config.pb.h"

namespace kedge::config {

struct Place {
  std::string file;
  int line = 1;    ///< from 1
  int column = 1;  ///< from 1
};

[[nodiscard]] std::string text_of(const Place& place);

/// Where fields were written, by path: "site.bearing_deg", "tags[cart-1].start", "tags[#3].device_id". An
/// entry goes by its name or, where that is no name, by its number from 1.
using Places = std::map<std::string, Place, std::less<>>;

/// Something wrong, and where; without a place it concerns a file as a whole.
struct Problem {
  Place place;
  std::string text;
};

struct Source {
  v1::Configuration merged;
  Places places;
  Place first;                    ///< the beginning of the first file
  std::vector<Problem> syntax;    ///< nothing else may be relied on if there are any
  std::vector<Problem> repeated;  ///< entries of one list that one file names twice
};

[[nodiscard]] Source read_files(const std::filesystem::path& path);
[[nodiscard]] Source read_text(std::string_view text, std::string_view name);

/// [a-z0-9_-], 1 to 32 of them.
[[nodiscard]] bool is_name(std::string_view text);

/// "tags[cart-1]": how paths and errors call entry `index` (from 0) of a list.
[[nodiscard]] std::string entry_path(std::string_view list, const google::protobuf::Message& entry, int index);

/// For error texts: in quotes, escaped, and cut at a bearable length.
[[nodiscard]] std::string in_quotes(std::string_view text);

}  // namespace kedge::config
