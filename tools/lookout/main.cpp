// kedge-lookout: the tags of a running station, live in the terminal, or one subscriber's messages in a file.
#include <fmt/core.h>
#include <google/protobuf/util/json_util.h>

#include <CLI/CLI.hpp>
#include <asio/io_context.hpp>
#include <asio/signal_set.hpp>
#include <asio/steady_timer.hpp>
#include <chrono>
#include <csignal>
#include <cstdio>
#include <fstream>
#include <string>

#include "core/build_info.h"
#include "io/monotonic.h"
#include "lookout/board.h"
#include "lookout/feed_connection.h"
#include "lookout/terminal.h"

namespace {

using kedge::lookout::Board;
using kedge::lookout::FeedConnection;
using kedge::lookout::Terminal;

constexpr int exit_usage = 2;
constexpr std::chrono::milliseconds redraw_period{200};
constexpr std::chrono::milliseconds print_period{1000};
// With --once, for tags of which nothing is ever told.
constexpr std::chrono::milliseconds once_max{2000};

struct Options {
  std::string connect = "127.0.0.1:47810";
  bool once = false;
  bool json = false;
  bool plain = false;
  double seconds = 0.0;
  std::string record;
  std::string summary;
};

class Lookout {
 public:
  explicit Lookout(Options options)
      : options_(std::move(options)),
        signals_(context_, SIGINT, SIGTERM, SIGHUP),
        end_timer_(context_),
        draw_timer_(context_),
        connection_(
            context_, [this](std::string_view line) { take(line); }, [this](const std::string& why) { end(why); }),
        terminal_(!options_.plain && !options_.json && !options_.once) {}

  /// The exit code.
  int run() {
    if (!options_.record.empty()) {
      record_.open(options_.record, std::ios::binary | std::ios::trunc);
      if (!record_) return refuse(fmt::format("{}: cannot be written", options_.record));
    }
    if (const kedge::Status opened = connection_.open(options_.connect); !opened) return refuse(opened.error());
    signals_.async_wait([this](const asio::error_code& error, int) {
      if (!error) end("");
    });
    if (options_.seconds > 0.0) end_after(std::chrono::duration<double>(options_.seconds));
    if (options_.once) end_after(once_max);
    if (!options_.once) show_later();
    context_.run();
    if (options_.once && failure_.empty()) show();
    write_files();
    return failure_.empty() ? 0 : 1;
  }
  [[nodiscard]] const std::string& failure() const { return failure_; }

 private:
  int refuse(const std::string& why) {
    failure_ = why;
    return 1;
  }

  void end(const std::string& failure) {
    failure_ = failure;
    connection_.close();
    context_.stop();
  }

  void end_after(std::chrono::duration<double> time) {
    end_timer_.expires_after(std::chrono::duration_cast<std::chrono::nanoseconds>(time));
    end_timer_.async_wait([this](const asio::error_code& error) {
      if (!error) end("");
    });
  }

  void take(std::string_view line) {
    const kedge::TimeNs now_ns = kedge::io::now_monotonic();
    if (line.starts_with("{\"error\":")) {
      end(fmt::format("the station refused: {}", line));
      return;
    }
    kedge::feed::v1::Message message;
    google::protobuf::util::JsonParseOptions tolerant;
    tolerant.ignore_unknown_fields = true;
    if (!google::protobuf::util::JsonStringToMessage(std::string(line), &message, tolerant).ok()) {
      end(fmt::format("a line that is no message came: {}", line.substr(0, 200)));
      return;
    }
    if (record_.is_open()) record_ << line << '\n';
    board_.take(message, now_ns);
    if (options_.once && board_.complete()) end("");
  }

  void show_later() {
    draw_timer_.expires_after(terminal_.drawing() ? redraw_period : print_period);
    draw_timer_.async_wait([this](const asio::error_code& error) {
      if (error) return;
      show();
      show_later();
    });
  }

  void show() {
    const kedge::TimeNs now_ns = kedge::io::now_monotonic();
    if (terminal_.drawing()) {
      terminal_.draw(board_.screen(Terminal::extent(), terminal_.colour(), now_ns));
    } else if (!kedge::lookout::put(options_.json ? board_.json() : board_.lines(now_ns))) {
      end("standard output takes no more");
    }
  }

  void write_files() {
    if (record_.is_open() && !record_.flush())
      failure_ = fmt::format("{}: not everything could be written", options_.record);
    if (options_.summary.empty()) return;
    std::ofstream summary(options_.summary, std::ios::binary | std::ios::trunc);
    summary << board_.summary();
    if (!summary.flush()) failure_ = fmt::format("{}: cannot be written", options_.summary);
  }

  Options options_;
  asio::io_context context_;
  asio::signal_set signals_;
  asio::steady_timer end_timer_;
  asio::steady_timer draw_timer_;
  FeedConnection connection_;
  Terminal terminal_;
  Board board_;
  std::ofstream record_;
  std::string failure_;
};

}  // namespace

int main(int argc, char** argv) {
  Options options;
  CLI::App app(
      "kedge-lookout: the tags of a running station.\n"
      "Positions are estimates that can be wrong without warning; not for any safety function.");
  app.set_version_flag("--version", std::string(kedge::version()));
  app.add_option("--connect", options.connect, "the station's feed: HOST:PORT in numbers, or unix:PATH")
      ->capture_default_str();
  app.add_flag("--once", options.once, "print one picture and end");
  app.add_flag("--json", options.json, "print each picture as one JSON object instead of a table");
  app.add_flag("--plain", options.plain, "print lines even on a terminal");
  app.add_option("--record", options.record, "write every received message to this file, one JSON line each");
  app.add_option("--seconds", options.seconds, "end after this time")->check(CLI::Range(0.1, 1e6));
  app.add_option("--summary", options.summary,
                 "at the end, write message counts and worst latency of each tag to this file");
  try {
    app.parse(argc, argv);
    if (const kedge::Status good = FeedConnection::check(options.connect); !good) {
      fmt::print(stderr, "kedge-lookout: --connect {}\n", good.error());
      return exit_usage;
    }
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : exit_usage;
  }
  std::signal(SIGPIPE, SIG_IGN);  // a reader that left is an error of the write
  int code = 0;
  std::string failure;
  {
    Lookout lookout(options);
    code = lookout.run();
    failure = lookout.failure();
  }
  // After the terminal is given back.
  if (!failure.empty()) fmt::print(stderr, "kedge-lookout: {}\n", failure);
  return code;
}
