#include "scoring/messages.h"

#include <fmt/core.h>
#include <google/protobuf/util/json_util.h>

#include <fstream>

namespace kedge::scoring {

namespace {

// A line without its end; what goes beyond line_bytes_max is left out and said. False at the end.
bool next_line(std::istream& in, std::string& line, bool& too_long) {
  line.clear();
  too_long = false;
  std::streambuf& buffer = *in.rdbuf();
  for (int c = buffer.sbumpc();; c = buffer.sbumpc()) {
    if (c == std::char_traits<char>::eof()) return !line.empty() || too_long;
    if (c == '\n') return true;
    if (line.size() < line_bytes_max) {
      line += static_cast<char>(c);
    } else {
      too_long = true;
    }
  }
}

}  // namespace

MessagesRead read_messages(std::istream& in, const std::string& name,
                           const std::function<void(const feed::v1::Message&)>& take) {
  MessagesRead read;
  feed::v1::Message message;
  std::string line;
  bool too_long = false;
  for (std::size_t number = 1; next_line(in, line, too_long); ++number) {
    if (line.empty() && !too_long) continue;
    std::string why = fmt::format("longer than {} bytes", line_bytes_max);
    message.Clear();
    if (!too_long) {
      const auto status = google::protobuf::util::JsonStringToMessage(line, &message);
      if (status.ok() && message.body_case() != feed::v1::Message::BODY_NOT_SET) {
        ++read.messages;
        take(message);
        continue;
      }
      why = status.ok() ? "a message of no known kind" : std::string(status.message().substr(0, 120));
    }
    if (read.lines_dropped++ == 0) read.first_drop = fmt::format("{}:{}: no message: {}", name, number, why);
  }
  return read;
}

Result<MessagesRead> read_messages(const std::filesystem::path& path,
                                   const std::function<void(const feed::v1::Message&)>& take) {
  std::ifstream in(path, std::ios::binary);
  if (!in || !std::filesystem::is_regular_file(path)) {
    return Error{fmt::format("{}: not a file that can be read; give a message file (JSON lines)", path.string())};
  }
  return read_messages(in, path.string(), take);
}

}  // namespace kedge::scoring
