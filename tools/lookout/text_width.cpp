#include "lookout/text_width.h"

#include <algorithm>
#include <utility>

namespace kedge::lookout {

namespace {

// UTF-8: every byte but the following ones of a character begins one.
bool begins_character(char c) { return (static_cast<unsigned char>(c) & 0xC0U) != 0x80U; }

}  // namespace

std::string printable(std::string_view text) {
  std::string clean(text);
  for (std::size_t i = 0; i < clean.size(); ++i) {
    const auto byte = static_cast<unsigned char>(clean[i]);
    const bool control = (byte < 0x20 && byte != '\n') || byte == 0x7F;
    // U+0080 to U+009F steer some terminals.
    const bool control_2 = i > 0 && static_cast<unsigned char>(clean[i - 1]) == 0xC2U && byte < 0xA0U && byte >= 0x80U;
    if (control) clean[i] = '?';
    if (control_2) clean[i - 1] = clean[i] = '?';
  }
  return clean;
}

std::string clipped(std::string_view text, std::size_t columns) {
  std::string clean = printable(text);
  std::size_t used = 0;
  for (std::size_t i = 0; i < clean.size(); ++i) {
    if (clean[i] == '\n') clean[i] = '?';
    if (begins_character(clean[i]) && ++used > columns) clean.resize(i);
  }
  return clean;
}

std::string padded(std::string_view text, std::size_t columns) {
  std::string fitted = clipped(text, columns);
  const auto used = static_cast<std::size_t>(std::count_if(fitted.begin(), fitted.end(), begins_character));
  fitted.append(columns - used, ' ');
  return fitted;
}

std::vector<std::string> wrapped(std::string_view text, std::size_t columns) {
  std::vector<std::string> lines;
  std::string line;
  while (!text.empty()) {
    const std::size_t end = std::min(text.find(' '), text.size());
    const std::string word = clipped(text.substr(0, end), columns);
    if (!line.empty() && line.size() + 1 + word.size() > columns) lines.push_back(std::exchange(line, {}));
    line += (line.empty() ? "" : " ") + word;
    text.remove_prefix(std::min(end + 1, text.size()));
  }
  if (!line.empty()) lines.push_back(line);
  return lines;
}

}  // namespace kedge::lookout
