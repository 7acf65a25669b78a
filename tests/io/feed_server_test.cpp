// The feed with real sockets, clients good and bad.
#include <google/protobuf/io/coded_stream.h>
#include <google/protobuf/io/zero_copy_stream_impl_lite.h>
#include <google/protobuf/util/delimited_message_util.h>
#include <google/protobuf/util/json_util.h>
#include <sys/stat.h>

#include <catch2/catch.hpp>
#include <filesystem>
#include <sstream>
#include <vector>

#include "io/feed_server.h"
#include "support/loop.h"
#include "support/socket_client.h"
#include "support/temporary_folder.h"

using namespace kedge;
using namespace std::chrono_literals;

namespace {

const std::string subscribe_line = "{\"subscribe\":{}}\n";

pipeline::Settings nursery() {
  pipeline::Settings settings;
  settings.site.name = "nursery";
  settings.tags.resize(2);
  settings.tags[0].model.name = "cart-1";
  settings.tags[1].model.name = "cart-2";
  return settings;
}

// One that the system would give now.
std::uint16_t free_port() {
  const int fd = ::socket(AF_INET, SOCK_STREAM, 0);
  sockaddr_in at{};
  at.sin_family = AF_INET;
  at.sin_addr.s_addr = htonl(INADDR_LOOPBACK);
  socklen_t size = sizeof(at);
  if (::bind(fd, reinterpret_cast<const sockaddr*>(&at), size) != 0) throw std::runtime_error("no port");
  ::getsockname(fd, reinterpret_cast<sockaddr*>(&at), &size);
  ::close(fd);
  return ntohs(at.sin_port);
}

// A feed server on a free port and a socket of its own.
struct Station {
  explicit Station(io::FeedServerOptions options = {}, feed::OutboxLimits limits = {})
      : distributor(settings, "0.1.0", limits) {
    options.unix_path = folder.file("feed");
    // The free port may be taken by someone else in between.
    for (int attempt = 0; !opened && attempt < 10; ++attempt) {
      options.tcp = "127.0.0.1:" + std::to_string(free_port());
      server = std::make_unique<io::FeedServer>(context, options, distributor,
                                                [this](std::string_view line) { log.emplace_back(line); });
      opened = server->open().ok();
    }
  }

  test::SocketClient tcp(int receive_buffer_bytes = 0) const {
    return test::SocketClient::tcp(server->tcp_port(), receive_buffer_bytes);
  }
  void pulse(int count = 1) {
    for (int i = 0; i < count; ++i) {
      feed::v1::Message message;
      message.set_sequence(++sequence);
      message.mutable_pulse()->set_time_ns(static_cast<std::int64_t>(sequence) * ns_per_s);
      distributor.message(message);
    }
  }
  bool lines(test::SocketClient& client, std::size_t count) {
    return test::run_until(context, [&] { return client.lines() >= count; });
  }
  bool ended(test::SocketClient& client) {
    return test::run_until(context, [&] { return client.ended(); });
  }

  asio::io_context context;
  test::TemporaryFolder folder;
  pipeline::Settings settings = nursery();
  feed::Distributor distributor;
  std::vector<std::string> log;
  std::unique_ptr<io::FeedServer> server;
  bool opened = false;
  std::uint64_t sequence = 0;
};

std::vector<feed::v1::Message> json_messages(const std::string& text) {
  std::vector<feed::v1::Message> messages;
  std::istringstream lines(text);
  for (std::string line; std::getline(lines, line);) {
    feed::v1::Message message;
    if (!google::protobuf::util::JsonStringToMessage(line, &message).ok())
      throw std::runtime_error("not a message: " + line);
    messages.push_back(message);
  }
  return messages;
}

std::vector<feed::v1::Message> delimited_messages(const std::string& bytes) {
  std::vector<feed::v1::Message> messages;
  google::protobuf::io::ArrayInputStream stream(bytes.data(), static_cast<int>(bytes.size()));
  google::protobuf::io::CodedInputStream input(&stream);
  bool clean_end = false;
  for (;;) {
    feed::v1::Message message;
    if (!google::protobuf::util::ParseDelimitedFromCodedStream(&message, &input, &clean_end)) break;
    messages.push_back(message);
  }
  if (!clean_end) throw std::runtime_error("the stream ends within a message");
  return messages;
}

// Every message of 1..last is there or in a Gap, in order and once.
void check_complete(const std::vector<feed::v1::Message>& messages, std::uint64_t last, std::uint64_t expected_lost) {
  std::uint64_t next = 1;
  std::uint64_t lost = 0;
  for (const auto& message : messages) {
    if (message.has_greeting()) continue;
    if (message.has_gap()) {
      REQUIRE(message.gap().first_sequence() == next);
      REQUIRE(message.gap().last_sequence() >= next);
      REQUIRE(message.gap().messages_lost() == message.gap().last_sequence() - next + 1);
      lost += message.gap().messages_lost();
      next = message.gap().last_sequence() + 1;
    } else {
      REQUIRE(message.sequence() == next);
      ++next;
    }
  }
  CHECK(next == last + 1);
  CHECK(lost == expected_lost);
}

}  // namespace

TEST_CASE("a JSON subscriber over TCP is greeted, then gets every message as a line") {
  Station station;
  REQUIRE(station.opened);
  auto client = station.tcp();
  station.pulse();  // before it asked
  test::run_for(station.context, 20ms);
  CHECK(client.text().empty());

  client.send(subscribe_line.substr(0, 5));
  test::run_for(station.context, 20ms);
  client.send(subscribe_line.substr(5));
  REQUIRE(station.lines(client, 1));
  station.pulse(3);
  REQUIRE(station.lines(client, 4));
  const auto messages = json_messages(client.text());
  REQUIRE(messages.size() == 4);
  REQUIRE(messages[0].has_greeting());
  CHECK(messages[0].greeting().site() == "nursery");
  CHECK(messages[0].greeting().after_sequence() == 1);
  CHECK_FALSE(messages[0].greeting().caution().empty());
  CHECK(messages[1].sequence() == 2);
  CHECK(messages[3].sequence() == 4);
  CHECK(station.server->counters().clients == 1);
  CHECK(station.server->counters().accepted == 1);
}

TEST_CASE("a delimited subscriber over the Unix-domain socket") {
  Station station;
  const std::string path = station.folder.file("feed");
  struct stat made {};
  REQUIRE(::stat(path.c_str(), &made) == 0);
  CHECK((made.st_mode & 0777) == 0660);

  auto client = test::SocketClient::local(path);
  feed::v1::ClientMessage ask;
  ask.mutable_subscribe()->add_subjects(feed::v1::Subject::pulse);
  std::ostringstream asked;
  google::protobuf::util::SerializeDelimitedToOstream(ask, &asked);
  client.send(asked.str());
  REQUIRE(test::run_until(station.context,
                          [&] { return station.server->counters().clients == 1 && !client.text().empty(); }));
  station.pulse(2);
  REQUIRE(test::run_until(station.context, [&] { return delimited_messages(client.text()).size() == 3; }));
  const auto messages = delimited_messages(client.text());
  CHECK(messages[0].greeting().site() == "nursery");
  CHECK(messages[1].sequence() == 1);
  CHECK(messages[2].pulse().time_ns() == 2 * ns_per_s);

  // Once it has its stream, a line of text would be taken for a message: it is just ended.
  client.send("more");
  REQUIRE(station.ended(client));
  CHECK(delimited_messages(client.text()).size() == 3);
  CHECK(station.server->counters().refused == 1);
}

TEST_CASE("a slow reader loses the oldest, is told exactly, and holds up no one") {
  Station station({}, {.messages_max = 100, .bytes_max = 1 << 20});
  auto slow = station.tcp(4096);
  auto quick = station.tcp();
  slow.send(subscribe_line);
  quick.send(subscribe_line);
  REQUIRE(station.lines(quick, 1));
  REQUIRE(test::run_until(station.context, [&] { return station.distributor.subscribers() == 2; }));

  const int rounds = 500;
  for (int i = 0; i < rounds; ++i) {
    station.pulse(40);
    test::run_for(station.context, 1ms);
    quick.text();
  }
  const std::uint64_t sent = rounds * 40;
  REQUIRE(station.lines(quick, 1 + sent));
  check_complete(json_messages(quick.text()), sent, 0);

  const std::uint64_t lost = station.server->counters().messages_lost;
  REQUIRE(lost > sent / 4);
  // It reads on at last; what had been lost stands as Gaps where it belongs.
  REQUIRE(test::run_until(station.context, [&] {
    return slow.text().find("\"sequence\":\"" + std::to_string(sent) + "\"") != std::string::npos &&
           slow.text().back() == '\n';
  }));
  const auto messages = json_messages(slow.text());
  check_complete(messages, sent, lost);
  CHECK(messages.size() < sent);
}

TEST_CASE("what is not a request is refused in one line") {
  Station station;
  const auto answer_to = [&](const std::string& said) {
    auto client = station.tcp();
    client.send(said);
    REQUIRE(station.ended(client));
    CHECK_FALSE(client.reset());
    return client.text();
  };
  CHECK(answer_to("GET / HTTP/1.1\r\n\r\n").starts_with("{\"error\":\""));
  CHECK(answer_to("{\"subscribe\":{\"tags\":[\"cart-9\"]}}\n") ==
        "{\"error\":\"subscribe.tags: there is no tag \\\"cart-9\\\" at this site\"}\n");
  CHECK(answer_to("{\"subscribe\":7}\n").starts_with("{\"error\":\"the line is not a request: "));
  CHECK(answer_to(subscribe_line + subscribe_line).starts_with("{\"error\":\"more bytes follow the request"));
  std::string noise;
  for (int i = 0; i < 1024; ++i) noise += static_cast<char>(0x80 | (i * 37));
  CHECK(answer_to(noise).starts_with("{\"error\":\""));
  CHECK(station.server->counters().refused == 5);
  REQUIRE(test::run_until(station.context, [&] { return station.server->counters().clients == 0; }));
}

TEST_CASE("a first line of 10 MB is refused after 4096 bytes, and its sender is not waited for") {
  Station station;
  auto client = station.tcp();
  const std::string part(65536, ' ');
  client.send("{ ");
  std::size_t sent = 2;
  // Pushes on for as long as it is let.
  REQUIRE(test::run_until(station.context, [&] {
    if (sent < 10'000'000) sent += client.send(part);
    return client.ended();
  }));
  CHECK(client.text() == "{\"error\":\"the line is longer than 4096 bytes\"}\n");
  REQUIRE(test::run_until(
      station.context, [&] { return station.log.size() == 1; }, 100ms));
  CHECK(station.log[0].ends_with(" refused: the line is longer than 4096 bytes"));
  // It may read why for a second, whatever it goes on to say.
  test::run_for(station.context, 1200ms);
  CHECK(client.send("x") + client.send("x") <= 1);
}

TEST_CASE("a client that ends its sending goes on listening, one that is gone is noticed") {
  Station station;
  const bool local = GENERATE(false, true);
  auto client = local ? test::SocketClient::local(station.folder.file("feed")) : station.tcp();
  client.send(subscribe_line);
  client.end_sending();
  REQUIRE(station.lines(client, 1));
  station.pulse(2);
  REQUIRE(station.lines(client, 3));
  CHECK(station.server->counters().clients == 1);
  client.close();
  // Over TCP the peer's system answers the next message with a reset.
  if (!local) station.pulse(1);
  REQUIRE(test::run_until(station.context, [&] { return station.server->counters().clients == 0; }));
  CHECK(station.distributor.subscribers() == 0);
}

TEST_CASE("a client that hangs up within its request is no loss") {
  Station station;
  auto client = station.tcp();
  client.send("{\"subscribe\":{}}");
  client.end_sending();
  REQUIRE(station.ended(client));
  CHECK(client.text() ==
        "{\"error\":\"the connection was closed before the request was complete; a JSON line ends with a "
        "line feed\"}\n");
}

TEST_CASE("a client too many is told so, and a free place is taken again") {
  io::FeedServerOptions options;
  options.clients_max = 2;
  Station station(options);
  auto first = station.tcp();
  auto second = station.tcp();
  first.send(subscribe_line);
  REQUIRE(station.lines(first, 1));
  auto third = station.tcp();
  third.send(subscribe_line);
  REQUIRE(station.ended(third));
  CHECK_FALSE(third.reset());
  CHECK(third.text() == "{\"error\":\"2 clients are connected, as many as are allowed (feed.clients_max)\"}\n");
  CHECK(station.server->counters().clients == 2);
  CHECK(station.server->counters().refused == 1);

  second.close();
  REQUIRE(test::run_until(station.context, [&] { return station.server->counters().clients == 1; }));
  auto fourth = station.tcp();
  fourth.send(subscribe_line);
  REQUIRE(station.lines(fourth, 1));

  // A crowd of refused ones is bounded too.
  std::vector<test::SocketClient> crowd;
  for (int i = 0; i < 60; ++i) crowd.push_back(station.tcp());
  REQUIRE(test::run_until(station.context, [&] { return station.server->counters().accepted == 64; }));
  for (auto& one : crowd) CHECK(station.ended(one));
  CHECK(station.server->counters().clients == 2);
}

TEST_CASE("a client that asks for nothing is refused in time") {
  io::FeedServerOptions options;
  options.subscribe_max = 150ms;
  Station station(options);
  auto client = station.tcp();
  client.send("{\"sub");
  test::run_for(station.context, 100ms);
  CHECK_FALSE(client.ended());
  REQUIRE(test::run_until(
      station.context, [&] { return client.ended(); }, 300ms));
  CHECK(client.text() ==
        "{\"error\":\"nothing was asked for within 0.15 s; the client speaks first, such as "
        "{\\\"subscribe\\\":{}}\"}\n");
  // One that has asked is not limited.
  auto subscriber = station.tcp();
  subscriber.send(subscribe_line);
  REQUIRE(station.lines(subscriber, 1));
  test::run_for(station.context, 250ms);
  CHECK_FALSE(subscriber.ended());
}

TEST_CASE("a client that takes nothing at all is dropped") {
  io::FeedServerOptions options;
  options.stall_max = 200ms;
  Station station(options);
  auto client = station.tcp(4096);
  client.send(subscribe_line);
  REQUIRE(test::run_until(station.context, [&] { return station.distributor.subscribers() == 1; }));
  // Fills what the two systems hold for it.
  for (int i = 0; i < 200; ++i) {
    station.pulse(100);
    test::run_for(station.context, 1ms);
  }
  REQUIRE(test::run_until(
      station.context, [&] { return station.server->counters().stalled == 1; }, 2000ms));
  CHECK(station.server->counters().clients == 0);
  CHECK(station.log.back().ends_with(" left: it took nothing for 0.2 s"));
}

TEST_CASE("a server that finishes lets its clients have what waits") {
  Station station;
  auto reader = station.tcp();
  auto silent = station.tcp();
  auto slow = station.tcp(4096);
  reader.send(subscribe_line);
  slow.send(subscribe_line);
  REQUIRE(station.lines(reader, 1));
  REQUIRE(test::run_until(station.context, [&] { return station.distributor.subscribers() == 2; }));
  for (int i = 0; i < 10; ++i) {
    station.pulse(1000);
    test::run_for(station.context, 5ms);
    reader.text();
  }
  station.pulse(1);
  bool done = false;
  const auto before = std::chrono::steady_clock::now();
  station.server->finish(300ms, [&] {
    done = true;
    station.server.reset();  // allowed
  });
  REQUIRE(test::run_until(station.context, [&] {
    reader.text();
    return done;
  }));
  CHECK(std::chrono::steady_clock::now() - before >= 300ms);  // the slow one was waited for
  CHECK(station.ended(reader));
  check_complete(json_messages(reader.text()), station.sequence, 0);
  CHECK(silent.ended());
  CHECK_FALSE(std::filesystem::exists(station.folder.file("feed")));
}

TEST_CASE("the feed stays on the station unless remote clients are allowed") {
  asio::io_context context;
  const pipeline::Settings settings = nursery();
  feed::Distributor distributor(settings, "0.1.0", {});
  const auto error_of = [&](const std::string& tcp, bool allow_remote) {
    io::FeedServerOptions options;
    options.tcp = tcp;
    options.allow_remote = allow_remote;
    io::FeedServer server(context, options, distributor, [](std::string_view) {});
    const Status status = server.open();
    return status ? std::string("open") : status.error();
  };
  const std::string port = std::to_string(free_port());
  CHECK(error_of("0.0.0.0:" + port, false) ==
        "feed.tcp: 0.0.0.0 is reachable from other machines, and the feed is neither encrypted nor authenticated; use "
        "127.0.0.1 or [::1], or set feed.allow_remote");
  CHECK(error_of("0.0.0.0:" + port, true) == "open");
  CHECK(error_of("[::1]:" + port, false) == "open");
  CHECK(error_of("gatehouse", false).starts_with("feed.tcp is \"gatehouse\"; "));
  const Station station;
  const std::string taken = std::to_string(station.server->tcp_port());
  CHECK(error_of("127.0.0.1:" + taken, false) ==
        "feed.tcp: 127.0.0.1 port " + taken +
            "/tcp: cannot listen: Address already in use; stop the other program or choose another port");
}

TEST_CASE("a server may go with clients in every state") {
  Station station;
  std::vector<test::SocketClient> clients;
  for (int i = 0; i < 6; ++i) clients.push_back(station.tcp());
  clients[0].send(subscribe_line);
  clients[1].send("garbage that is refused");
  clients[2].send("{\"sub");
  REQUIRE(test::run_until(station.context, [&] { return station.distributor.subscribers() == 1; }));
  station.pulse(10);
  clients[3].send(subscribe_line);
  station.server.reset();
  station.pulse(10);
  test::run_for(station.context, 50ms);
  for (auto& client : clients) CHECK(client.ended());
  CHECK(station.distributor.subscribers() == 0);
}
