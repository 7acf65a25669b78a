#include "lookout/terminal.h"

#include <sys/ioctl.h>
#include <unistd.h>

#include <algorithm>
#include <cstdio>
#include <cstdlib>
#include <string>

namespace kedge::lookout {

namespace {

// ECMA-48 and, for the second screen and the cursor, the private modes every terminal of today has.
constexpr std::string_view enter = "\x1b[?1049h\x1b[?25l";
constexpr std::string_view leave = "\x1b[?25h\x1b[?1049l";
constexpr std::string_view to_the_top = "\x1b[H";
constexpr std::string_view clear_line = "\x1b[K";
constexpr std::string_view clear_below = "\x1b[J";

}  // namespace

bool put(std::string_view text) {
  return std::fwrite(text.data(), 1, text.size(), stdout) == text.size() && std::fflush(stdout) == 0;
}

Terminal::Terminal(bool wanted) : drawing_(wanted && ::isatty(STDOUT_FILENO) == 1) {
  const char* no_colour = std::getenv("NO_COLOR");
  colour_ = no_colour == nullptr || *no_colour == '\0';
  if (drawing_) put(enter);
}

Terminal::~Terminal() {
  if (drawing_) put(leave);
}

Extent Terminal::extent() {
  winsize size{};
  if (::ioctl(STDOUT_FILENO, TIOCGWINSZ, &size) != 0 || size.ws_col == 0 || size.ws_row == 0) return {};
  // The last row stays free: a line feed in it would scroll.
  return {size.ws_col, std::max<std::size_t>(size.ws_row, 2) - 1U};
}

void Terminal::draw(std::string_view screen) {
  std::string text(to_the_top);
  for (const char c : screen) {
    if (c == '\n') text += clear_line;
    text += c;
  }
  text += clear_below;
  put(text);
}

}  // namespace kedge::lookout
