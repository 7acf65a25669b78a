// The operator's socket with real clients, and the sockets' files.
#include <google/protobuf/util/json_util.h>
#include <sys/stat.h>

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <filesystem>
#include <fstream>
#include <vector>

#include "config/rules.h"
#include "io/control_socket.h"
#include "io/json_line.h"
#include "io/listener.h"
#include "support/loop.h"
#include "support/socket_client.h"
#include "support/temporary_folder.h"

using namespace kedge;
using namespace std::chrono_literals;

namespace {

std::string why(std::string_view line) {
  const auto parsed = io::parse_correction(line);
  return parsed ? "accepted" : parsed.error();
}

}  // namespace

TEST_CASE("a correction is read whole") {
  const auto parsed = io::parse_correction(
      R"({"correction":{"tag":"cart-3","east_m":4,"north_m":-7.5,"up_m":0.5,"position_sigma_m":0.2,"heading_deg":90,"heading_sigma_deg":3}})");
  REQUIRE(parsed.ok());
  CHECK(parsed->tag() == "cart-3");
  CHECK(parsed->east_m() == 4.0);
  CHECK(parsed->north_m() == -7.5);
  CHECK(parsed->up_m() == 0.5);
  CHECK(parsed->position_sigma_m() == 0.2);
  CHECK(parsed->heading_deg() == 90.0);
  CHECK(parsed->heading_sigma_deg() == 3.0);
  CHECK(why(R"({"correction":{"tag":"cart-3","heading_deg":0}})") == "accepted");
  CHECK(why(R"({"correction":{"tag":"cart-3","east_m":0,"north_m":0}})") == "accepted");
}

TEST_CASE("a correction that says nothing, half or nonsense is refused with the reason") {
  CHECK(why(R"({"correction":{"heading_deg":90}})") == "correction.tag is missing: it names the tag");
  CHECK(why(R"({"correction":{"tag":"a"}})") ==
        "the correction says nothing: give east_m and north_m, or heading_deg, or both");
  CHECK(why(R"({"correction":{"tag":"a","east_m":1}})") ==
        "correction.east_m and north_m go together: give both or none");
  CHECK(why(R"({"correction":{"tag":"a","north_m":1,"heading_deg":3}})") ==
        "correction.east_m and north_m go together: give both or none");
  CHECK(why(R"({"correction":{"tag":"a","east_m":"NaN","north_m":1}})") ==
        "correction.east_m is not a finite number; it must be -100000 to 100000 m");
  CHECK(why(R"({"correction":{"tag":"a","heading_deg":"Infinity"}})") ==
        "correction.heading_deg is not a finite number; it must be -360 to 360 deg");
  CHECK(why(R"({"correction":{"tag":"a","east_m":1,"north_m":1,"position_sigma_m":0}})") ==
        "correction.position_sigma_m is 0; it must be 0.001 to 10000 m");
  CHECK(why(R"({"correction":{"tag":"a","heading_deg":1,"heading_sigma_deg":-2}})") ==
        "correction.heading_sigma_deg is -2; it must be 0.01 to 180 deg");
  CHECK(why(R"({"correction":{"tag":"a","heading_deg":1,"up_m":2}})") ==
        "correction.up_m needs east_m and north_m beside it");
  CHECK(why(R"({"correction":{"tag":"a","heading_deg":1,"position_sigma_m":2}})") ==
        "correction.position_sigma_m needs a position");
  CHECK(why(R"({"correction":{"tag":"a","east_m":1,"north_m":2,"heading_sigma_deg":2}})") ==
        "correction.heading_sigma_deg needs heading_deg");
  // The other records of the station are its own to make.
  CHECK(why(R"({"tick":{}})") == R"(only a "correction" is taken here)");
  CHECK(why("{}") == R"(only a "correction" is taken here)");
  for (const char* text :
       {"", "here", R"({"correction":{"tag":"a","color":1}})", R"({"correction":{"tag":7}})", "[1,2]"}) {
    CAPTURE(text);
    const std::string error = why(text);
    CHECK(error.starts_with("this is no request: "));
    CHECK(error.ends_with(
        R"(; one looks like {"correction":{"tag":"cart-3","east_m":4,"north_m":7.5,"heading_deg":90}})"));
    CHECK(error.find('\n') == std::string::npos);
  }
  CHECK(why(std::string(3000, '[')).starts_with("this is no request: "));
}

TEST_CASE("a correction keeps to the bounds of the configuration") {
  const auto answer = [](const char* field, double value) {
    station::v1::StationRecord record;
    station::v1::Correction& correction = *record.mutable_correction();
    correction.set_tag("a");
    correction.set_east_m(1);
    correction.set_north_m(1);
    correction.set_heading_deg(1);
    correction.GetReflection()->SetDouble(&correction, correction.GetDescriptor()->FindFieldByName(field), value);
    std::string line;
    REQUIRE(google::protobuf::util::MessageToJsonString(record, &line).ok());
    return why(line);
  };
  struct Case {
    const char* field;
    const char* rule;
  };
  const std::vector<Case> cases = {{"east_m", "Start.east_m"},
                                   {"north_m", "Start.north_m"},
                                   {"up_m", "Anchor.up_m"},
                                   {"position_sigma_m", "Start.position_sigma_m"},
                                   {"heading_deg", "Start.heading_deg"},
                                   {"heading_sigma_deg", "Start.heading_sigma_deg"}};
  for (const auto& [field, name] : cases) {
    CAPTURE(field);
    const auto rules = config::rules();
    const auto rule =
        std::find_if(rules.begin(), rules.end(), [&](const config::Rule& one) { return one.field == name; });
    REQUIRE(rule != rules.end());
    const std::string range = fmt::format("; it must be {} to {} {}", rule->low, rule->high, rule->unit);
    CHECK(answer(field, rule->low) == "accepted");
    CHECK(answer(field, rule->high) == "accepted");
    const double below = std::nextafter(rule->low, -1e9);
    CHECK(answer(field, below) == fmt::format("correction.{} is {}{}", field, below, range));
    CHECK(answer(field, 1e300) == fmt::format("correction.{} is 1e+300{}", field, range));
  }
}

TEST_CASE("an answer's text is JSON whatever it holds") {
  // RFC 8259, section 7: quotation mark, reverse solidus and U+0000 to U+001F must be escaped.
  CHECK(io::json_quoted("a\"b\\c\n\x01") == R"("a\"b\\c\u000a\u0001")");
  CHECK(io::json_quoted("K\xC3\xA4"
                        "fer \xE2\x82\xAC \xF0\x9F\x9A\x9C") ==
        "\"K\xC3\xA4"
        "fer \xE2\x82\xAC \xF0\x9F\x9A\x9C\"");
  // RFC 3629, section 3: overlong, surrogates and beyond U+10FFFF are no UTF-8; so is a cut character.
  CHECK(io::json_quoted("\xC0\x80") == "\"??\"");
  CHECK(io::json_quoted("\xED\xA0\x80") == "\"???\"");
  CHECK(io::json_quoted("\xF4\x90\x80\x80") == "\"????\"");
  CHECK(io::json_quoted("x\xE2\x82") == "\"x??\"");
  CHECK(io::error_line("no") == "{\"error\":\"no\"}\n");
}

TEST_CASE("operators are answered one line each, in order") {
  asio::io_context context;
  const test::TemporaryFolder folder;
  const std::string path = folder.file("control");
  std::vector<std::string> corrected;
  io::ControlSocket control(context, path, [&](const station::v1::Correction& correction) -> Status {
    if (correction.tag() != "cart-3") return Error{"there is no tag \"" + correction.tag() + "\""};
    corrected.push_back(correction.tag());
    return {};
  });
  REQUIRE(control.open().ok());
  struct stat made {};
  REQUIRE(::stat(path.c_str(), &made) == 0);
  CHECK((made.st_mode & 0777) == 0660);

  auto client = test::SocketClient::local(path);
  const std::string good = R"({"correction":{"tag":"cart-3","heading_deg":90}})";
  const std::string unknown = R"({"correction":{"tag":"cart-9","heading_deg":90}})";
  // Cut anywhere, and several at once.
  client.send(good.substr(0, 10));
  test::run_for(context, 20ms);
  client.send(good.substr(10) + "\n" + unknown + "\n" + good + "\n");
  REQUIRE(test::run_until(context, [&] { return client.lines() == 3; }));
  CHECK(client.text() == "{\"accepted\":true}\n{\"error\":\"there is no tag \\\"cart-9\\\"\"}\n{\"accepted\":true}\n");
  CHECK(corrected.size() == 2);

  SECTION("a request without end is refused") {
    client.send(std::string(6000, 'x'));
    REQUIRE(test::run_until(context, [&] { return client.ended(); }));
    CHECK(client.text().ends_with("{\"error\":\"the request is longer than 4096 bytes\"}\n"));
  }
  SECTION("there is room for so many operators and no more") {
    std::vector<test::SocketClient> more;
    for (int i = 0; i < 7; ++i) more.push_back(test::SocketClient::local(path));
    test::run_for(context, 50ms);
    auto ninth = test::SocketClient::local(path);
    REQUIRE(test::run_until(context, [&] { return ninth.ended(); }));
    CHECK(ninth.text() == "{\"error\":\"8 operators are connected already; try again later\"}\n");
    client.close();
    test::run_for(context, 50ms);
    auto tenth = test::SocketClient::local(path);
    tenth.send(good + "\n");
    REQUIRE(test::run_until(context, [&] { return tenth.lines() == 1; }));
    CHECK(tenth.text() == "{\"accepted\":true}\n");
  }
  SECTION("closing ends the operators and removes the file") {
    control.close();
    REQUIRE(test::run_until(context, [&] { return client.ended(); }));
    CHECK_FALSE(std::filesystem::exists(path));
  }
}

TEST_CASE("a socket's file is replaced only if no one listens on it") {
  asio::io_context context;
  const test::TemporaryFolder folder;
  const std::string path = folder.file("control");
  const auto accept_none = [](io::StreamSocket, const std::string&) {};
  auto first = std::make_unique<io::Listener>(context, accept_none);
  REQUIRE(first->open_local(path).ok());

  io::Listener second(context, accept_none);
  const Status taken = second.open_local(path);
  REQUIRE_FALSE(taken.ok());
  CHECK(taken.error() == path + ": another program listens there; stop it or choose another path");

  // Its program died without tidying up: the file stays, and no one listens.
  std::filesystem::rename(path, folder.file("moved"));
  first.reset();
  std::filesystem::rename(folder.file("moved"), path);
  CHECK_FALSE(test::SocketClient::local(path).connected());
  REQUIRE(second.open_local(path).ok());
  CHECK(test::SocketClient::local(path).connected());
  second.close();
  CHECK_FALSE(std::filesystem::exists(path));

  std::ofstream(path) << "a list of plants";
  const Status file = second.open_local(path);
  REQUIRE_FALSE(file.ok());
  CHECK(file.error() == path + ": exists and is not a socket; remove it or choose another path");
  CHECK(std::filesystem::exists(path));

  const Status no_folder = second.open_local(folder.file("none/control"));
  REQUIRE_FALSE(no_folder.ok());
  CHECK(no_folder.error() ==
        folder.file("none/control") +
            ": cannot make the socket: No such file or directory; its folder must exist and be writable");
  const std::string longer(200, 'p');
  const Status too_long = second.open_local(longer);
  REQUIRE_FALSE(too_long.ok());
  CHECK(too_long.error() == longer + ": the path of a socket has 1 to 107 bytes, this one 200");
}
