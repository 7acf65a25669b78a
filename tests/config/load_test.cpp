#include "config/load.h"

#include <fmt/format.h>

#include <catch2/catch.hpp>

#include "support/temporary_folder.h"

namespace kedge::config {
namespace {

using Errors = std::vector<std::string>;

Errors errors_of(std::string_view text) { return load_text(text, "t").errors; }

/// A good configuration with one line more, at line 5.
Errors errors_with(std::string_view line) {
  return errors_of(
      fmt::format("site {{ name: \"yard\" }}\n"
                  "anchors {{ name: \"mast\" anchor_id: 1 east_m: 0 north_m: 0 up_m: 3 }}\n"
                  "tags {{ name: \"cart-1\" device_id: 11 }}\n"
                  "links {{ name: \"radio\" udp {{ port: 47800 }} }}\n"
                  "{}\n",
                  line));
}

TEST_CASE("a good configuration loads and has no errors") {
  const Loaded loaded =
      load_text("site { name: \"yard\" }\nanchors { name: \"mast\" anchor_id: 1 east_m: 0 north_m: 0 up_m: 3 }", "t");
  CHECK(loaded.errors.empty());
  REQUIRE(loaded.merged.has_value());
  CHECK(loaded.merged->site().name() == "yard");
  CHECK(loaded.merged->anchors(0).up_m() == 3.0);
  CHECK(errors_with("").empty());
}

// These texts, and the place after an unknown word, are those of the text format parser of libprotobuf.
TEST_CASE("a syntax error stops with its place") {
  CHECK(errors_of("site {\n  name: \"yard\n}") == Errors{"t:2:14: String literals cannot cross line boundaries."});
  CHECK(errors_with("limits { tick_herz: 5 }") ==
        Errors{"t:5:19: Message type \"kedge.config.v1.Limits\" has no field named \"tick_herz\"."});
  CHECK(errors_with("limits { tick_hz: 5 tick_hz: 0 }") ==
        Errors{"t:5:28: Non-repeated field \"tick_hz\" is specified multiple times."});
  CHECK(errors_with("site { }") == Errors{"t:5:6: Non-repeated field \"site\" is specified multiple times."});
  CHECK(errors_with("tags { device_id: -1 }") == Errors{"t:5:19: Expected integer, got: -"});
  CHECK(errors_with("tags { profile: hovering }") ==
        Errors{"t:5:26: Unknown enumeration value of \"hovering\" for field \"profile\"."});
  CHECK(errors_with("links { name: \"a\" udp { port: 1 } serial { device: \"d\" } }")[0].starts_with(
      "t:5:42: Field \"serial\""));
}

TEST_CASE("zero counts as written: a field set to 0 and then again is repeated") {
  CHECK(errors_with("limits { missing_share_max: 0 missing_share_max: 0.5 }") ==
        Errors{"t:5:48: Non-repeated field \"missing_share_max\" is specified multiple times."});
}

TEST_CASE("what is missing is told at what should hold it") {
  CHECK(errors_of("") == Errors{"t:1:1: site is missing; it needs at least a name",
                                "t:1:1: anchors are missing; there must be at least one"});
  CHECK(errors_of("# nothing\nsite { }\nanchors { }") ==
        Errors{"t:2:1: site.name is missing", "t:3:1: anchors[#1].name is missing",
               "t:3:1: anchors[#1].anchor_id is missing", "t:3:1: anchors[#1].east_m is missing",
               "t:3:1: anchors[#1].north_m is missing", "t:3:1: anchors[#1].up_m is missing"});
  CHECK(errors_with("tags { name: \"cart-2\" start { heading_deg: 10 } }") ==
        Errors{"t:5:1: tags[cart-2].device_id is missing", "t:5:23: tags[cart-2].start.east_m is missing",
               "t:5:23: tags[cart-2].start.north_m is missing",
               "t:5:23: tags[cart-2].start.position_sigma_m is missing",
               "t:5:23: tags[cart-2].start.heading_sigma_deg is missing; heading_deg needs it"});
  CHECK(errors_with("tags { name: \"a\" device_id: 1 start { east_m: 1 north_m: 1 position_sigma_m: 1 "
                    "heading_sigma_deg: 5 } }") ==
        Errors{"t:5:31: tags[a].start.heading_deg is missing; heading_sigma_deg has no meaning without it"});
  CHECK(errors_with(
            "links { name: \"a\" }\nlinks { name: \"b\" udp { } }\nlinks { name: \"c\" serial { baud: 9600 } }") ==
        Errors{"t:5:1: links[a] has no port; it needs udp or serial", "t:6:19: links[b].udp.port is missing",
               "t:7:19: links[c].serial.device is missing"});
}

TEST_CASE("numbers out of range are refused with range and unit, never clipped") {
  CHECK(errors_with("limits { tick_hz: 5000 delay_max_s: 2.5 missing_share_max: -0.1 }") ==
        Errors{"t:5:10: limits.tick_hz is 5000; it must be 0.1 to 100 Hz",
               "t:5:24: limits.delay_max_s is 2.5; it must be 0.01 to 2 s",
               "t:5:41: limits.missing_share_max is -0.1; it must be 0 to 1"});
  CHECK(errors_with("tags { name: \"a\" device_id: 0 start { east_m: 1 north_m: 1 position_sigma_m: 0 } }") ==
        Errors{"t:5:18: tags[a].device_id is 0; it must be 1 to 4294967295",
               "t:5:60: tags[a].start.position_sigma_m is 0; it must be 0.001 to 10000 m"});
  CHECK(errors_with("links { name: \"a\" udp { port: 70000 } }") ==
        Errors{"t:5:25: links[a].udp.port is 70000; it must be 1 to 65535"});
}

TEST_CASE("what is not a number is refused wherever a number stands") {
  CHECK(errors_with("limits { tick_hz: nan range_max_m: inf }\n"
                    "tags { name: \"a\" device_id: 1 magnetometer { hard_iron_ut: [1, nan, 2] } }") ==
        Errors{"t:5:10: limits.tick_hz is not a number; it must be 0.1 to 100 Hz",
               "t:5:23: limits.range_max_m is inf; it must be 1 to 100000 m",
               "t:6:46: tags[a].magnetometer.hard_iron_ut is not a number; it must be -10000 to 10000 uT"});
}

TEST_CASE("a word given by an unknown number is refused") {
  CHECK(errors_with("tags { name: \"a\" device_id: 1 profile: 9 }") ==
        Errors{"t:5:31: tags[a].profile is 9; it must be one of wheeled, walker, flyer, free"});
}

TEST_CASE("names are short and plain") {
  CHECK(errors_with("tags { name: \"Cart 1\" device_id: 1 }\ntags { name: \"\" device_id: 2 }\n"
                    "links { name: \"a-name-of-thirty-three-characters\" udp { port: 1 } }\n"
                    "tags { name: \"a\\nb\\\"\" device_id: 3 }") ==
        Errors{"t:5:8: tags[#2].name is \"Cart 1\"; a name is 1 to 32 of a to z, 0 to 9, '_' and '-'",
               "t:6:8: tags[#3].name is \"\"; a name is 1 to 32 of a to z, 0 to 9, '_' and '-'",
               "t:7:9: links[#2].name is \"a-name-of-thirty-three-characters\"; a name is 1 to 32 of a to z, 0 to 9, "
               "'_' and '-'",
               "t:8:8: tags[#4].name is \"a\\x0ab\\\"\"; a name is 1 to 32 of a to z, 0 to 9, '_' and '-'"});
}

TEST_CASE("names, device numbers, anchor numbers and ports are used once") {
  CHECK(errors_with("tags { name: \"cart-1\" device_id: 12 }\n"
                    "tags { name: \"cart-2\" device_id: 11 }\n"
                    "anchors { name: \"pole\" anchor_id: 1 east_m: 9 north_m: 0 up_m: 3 device_id: 11 }\n"
                    "links { name: \"other\" udp { address: \"127.0.0.1\" port: 47800 } }") ==
        Errors{"t:3:23: tags[cart-1].device_id is 11, as is anchors[pole].device_id at t:7:66",
               "t:5:1: tags has the name \"cart-1\" twice; it is first used at t:3:1",
               "t:6:23: tags[cart-2].device_id is 11, as is anchors[pole].device_id at t:7:66",
               "t:7:24: anchors[pole].anchor_id is 1, as is anchors[mast].anchor_id at t:2:24",
               "t:8:23: links[other].udp is 127.0.0.1 port 47800, as is links[radio].udp at t:4:23"});
}

TEST_CASE("fields must fit each other") {
  CHECK(errors_with("limits { settled_enter_m: 4 }") ==
        Errors{"t:5:10: limits.settled_enter_m does not fit: settled_enter_m 4 m is above settled_leave_m 3 m"});
  CHECK(errors_with("limits { settled_leave_m: 5 lost_radius_m: 4 silent_s: 1.5 }") ==
        Errors{"t:5:29: limits.lost_radius_m does not fit: settled_leave_m 5 m is above lost_radius_m 4 m",
               "t:5:46: limits.silent_s does not fit: range_stale_s 2 s is above silent_s 1.5 s"});
  CHECK(errors_of("site { name: \"y\" extent { east_min_m: 5 east_max_m: 5 north_min_m: 0 north_max_m: -1 } }\n"
                  "anchors { name: \"mast\" anchor_id: 1 east_m: 0 north_m: 0 up_m: 3 }") ==
        Errors{"t:1:18: site.extent is empty: east_min_m 5 is not below east_max_m 5",
               "t:1:18: site.extent is empty: north_min_m 0 is not below north_max_m -1"});
  CHECK(errors_with("tags { name: \"a\" device_id: 1 magnetometer { hard_iron_ut: [1, 2] soft_iron: [1, 0, 0, 1] } }\n"
                    "tags { name: \"b\" device_id: 2 magnetometer { soft_iron: [1, 0, 0, 0, 1, 0, 1, 0, 0] } }") ==
        Errors{"t:5:46: tags[a].magnetometer.hard_iron_ut has 2 values; it must have 3 or none",
               "t:5:67: tags[a].magnetometer.soft_iron has 4 values; it must have 9 or none",
               "t:6:46: tags[b].magnetometer.soft_iron has the determinant 0; below 0.001 it loses a direction"});
}

TEST_CASE("a range lag is no longer than the time that ranges are waited for") {
  const auto with_lag = [](const std::string& lag_s, const std::string& limits = "") {
    return errors_with(fmt::format("tags {{ name: \"a\" device_id: 1 range_lag_s: {} }} {}", lag_s, limits));
  };
  const std::string late = ", so every range would come too late to be used";
  CHECK(with_lag("1.5") ==
        Errors{"t:5:31: tags[a].range_lag_s does not fit: range_lag_s 1.5 s is above limits.delay_max_s 1 s" + late});
  CHECK(with_lag("0.5", "limits { delay_max_s: 0.4 }") ==
        Errors{"t:5:31: tags[a].range_lag_s does not fit: range_lag_s 0.5 s is above limits.delay_max_s 0.4 s" + late});
  CHECK(with_lag("1.5", "limits { delay_max_s: 2 }") == Errors{});
  CHECK(with_lag("1") == Errors{});
  CHECK(with_lag("-0.01") == Errors{"t:5:31: tags[a].range_lag_s is -0.01; it must be 0 to 2 s"});
}

TEST_CASE("addresses are numbers with a port, and remote ones must be meant") {
  const std::string rule =
      "; it must be an address in numbers and a port of 1 to 65535, such as 127.0.0.1:47810 or [::1]:47810";
  for (const std::string bad :
       {"", "47810", "127.0.0.1", "127.0.0.1:", "127.0.0.1:0", "127.0.0.1:65536", "127.0.0.1:8x", "::1:47810",
        "[127.0.0.1]:47810", "station:47810", "127.0.0.1 :47810"}) {
    INFO(bad);
    const Errors errors = errors_with("feed { tcp: \"" + bad + "\" }");
    REQUIRE(!errors.empty());
    CHECK(errors.back() == "t:5:8: feed.tcp is \"" + bad + "\"" + rule);
  }
  for (const std::string good : {"127.0.0.1:47810", "127.3.2.1:1", "[::1]:65535", "localhost:47810"}) {
    CHECK(errors_with("feed { tcp: \"" + good + "\" }").empty());
  }
  CHECK(
      errors_with("feed { tcp: \"0.0.0.0:47810\" }") ==
      Errors{"t:5:8: feed.tcp is \"0.0.0.0:47810\", which other computers can reach, and the feed is neither encrypted "
             "nor authenticated; write allow_remote: true if that is meant"});
  CHECK(errors_with("feed { tcp: \"[2001:db8::1]:47810\" }").size() == 1);
  CHECK(errors_with("feed { tcp: \"0.0.0.0:47810\" allow_remote: true }").empty());
  CHECK(errors_with("links { name: \"a\" udp { address: \"station\" port: 1 } }") ==
        Errors{"t:5:25: links[a].udp.address is \"station\"; it must be an IPv4 or IPv6 address in numbers"});
  CHECK(errors_with("links { name: \"a\" udp { address: \"::\" port: 1 } }").empty());
}

TEST_CASE("paths are printable, not empty, and fit where they go") {
  const std::string long_path(108, 'p');
  CHECK(errors_with("feed { unix: \"" + long_path + "\" }\ncapture { folder: \"\" }\ncontrol { unix: \"a\\001b\" }") ==
        Errors{"t:5:8: feed.unix has 108 bytes; it must not be longer than 107",
               "t:6:11: capture.folder is empty; leave the field out instead",
               "t:7:11: control.unix is \"a\\x01b\"; control characters are not allowed"});
  CHECK(errors_with("feed { unix: \"s\" }\ncontrol { unix: \"s\" }") ==
        Errors{"t:6:11: control.unix is \"s\", as is feed.unix at t:5:8"});
}

TEST_CASE("there is a limit to every list") {
  std::string text;
  for (int i = 0; i < 200; ++i) text += fmt::format("tags {{ name: \"t{}\" device_id: {} }} ", i, 100 + i);
  for (int i = 0; i < 16; ++i) {
    text += fmt::format("anchors {{ name: \"a{0}\" anchor_id: {1} east_m: {0} north_m: 0 up_m: 0 }} ", i, 100 + i);
    text += fmt::format("links {{ name: \"l{0}\" udp {{ port: {1} }} }} ", i, 100 + i);
  }
  CHECK(errors_with(text) == Errors{"t:1:1: anchors has 17 entries; at most 16 are allowed",
                                    "t:1:1: tags has 201 entries; at most 200 are allowed",
                                    "t:1:1: links has 17 entries; at most 16 are allowed"});
}

TEST_CASE("a text is bounded in size and in nesting") {
  CHECK(errors_of(std::string(file_bytes_max + 1, ' ')) == Errors{"t:1:1: the text is larger than 1048576 bytes"});
  std::string nested;
  for (int i = 0; i < 100000; ++i) nested += "site { ";
  CHECK(errors_of(nested).size() == 1);
}

TEST_CASE("a text that is not a file includes nothing") {
  CHECK(errors_with("include: \"other.txtpb\"") ==
        Errors{"t:5:1: a configuration that is not a file cannot include one"});
}

TEST_CASE("fragments are merged in order, later fields winning, entries by name") {
  const test::TemporaryFolder folder;
  folder.write("sub/one.txtpb",
               "include: \"two.txtpb\"\nlimits { tick_hz: 5 silent_s: 20 }\n"
               "tags { name: \"cart-1\" device_id: 1 magnetometer { hard_iron_ut: [1, 2, 3] } }");
  folder.write("sub/two.txtpb",
               "limits { tick_hz: 4 delay_max_s: 0.5 missing_share_max: 0.6 }\n"
               "links { name: \"radio\" serial { device: \"d\" baud: 9600 } }\n"
               "site { name: \"far\" bearing_deg: 7 }");
  const auto path = folder.write("site.txtpb",
                                 "include: \"sub/one.txtpb\"\nsite { name: \"yard\" }\n"
                                 "limits { silent_s: 30 missing_share_max: 0 }\n"
                                 "anchors { name: \"mast\" anchor_id: 1 east_m: 0 north_m: 0 up_m: 3 }\n"
                                 "tags { name: \"cart-2\" device_id: 2 }\n"
                                 "tags { name: \"cart-1\" device_id: 21 magnetometer { hard_iron_ut: [4, 5, 6] } }\n"
                                 "links { name: \"radio\" udp { port: 9 } }\n");
  const Loaded loaded = load(path);
  REQUIRE(loaded.errors == Errors{});
  const v1::Configuration& c = *loaded.merged;
  CHECK(c.include_size() == 0);
  CHECK(c.site().name() == "yard");
  CHECK(c.site().bearing_deg() == 7.0);
  CHECK(c.limits().tick_hz() == 5.0);
  CHECK(c.limits().delay_max_s() == 0.5);
  CHECK(c.limits().silent_s() == 30.0);
  CHECK(c.limits().has_missing_share_max());
  CHECK(c.limits().missing_share_max() == 0.0);
  REQUIRE(c.tags_size() == 2);
  CHECK(c.tags(0).name() == "cart-1");
  CHECK(c.tags(0).device_id() == 21);
  REQUIRE(c.tags(0).magnetometer().hard_iron_ut_size() == 3);
  CHECK(c.tags(0).magnetometer().hard_iron_ut(0) == 4.0);
  CHECK(c.tags(1).name() == "cart-2");
  REQUIRE(c.links_size() == 1);
  CHECK(c.links(0).has_udp());
  CHECK_FALSE(c.links(0).has_serial());
}

TEST_CASE("an error of meaning is told in the file that wrote the field last") {
  const test::TemporaryFolder folder;
  folder.write("base.txtpb", "limits { tick_hz: 5000 range_max_m: -1 }\nsite { name: \"y\" }\n");
  const auto path = folder.write("site.txtpb",
                                 "include: \"base.txtpb\"\nlimits {\n  tick_hz: 2000\n}\n"
                                 "anchors { name: \"m\" anchor_id: 1 east_m: 0 north_m: 0 up_m: 3 }\n");
  CHECK(load(path).errors ==
        Errors{path.string() + ":3:3: limits.tick_hz is 2000; it must be 0.1 to 100 Hz",
               (folder.path() / "base.txtpb").string() + ":1:24: limits.range_max_m is -1; it must be 1 to 100000 m"});
}

TEST_CASE("includes that lead nowhere, to themselves or too deep are refused at the include") {
  const test::TemporaryFolder folder;
  const auto text = [&](const std::string& name) { return "\"" + (folder.path() / name).string() + "\""; };
  const auto a = folder.write("a.txtpb", "include: \"b.txtpb\"");
  const auto b = folder.write("b.txtpb", "\n  include: \"a.txtpb\"");
  CHECK(load(a).errors == Errors{b.string() + ":2:3: include " + text("a.txtpb") + ": the file includes itself"});

  const auto lost = folder.write("lost.txtpb", "include: \"none.txtpb\"\ninclude: \".\"");
  CHECK(load(lost).errors == Errors{lost.string() + ":1:1: include " + text("none.txtpb") + ": there is no such file",
                                    lost.string() + ":2:1: include " + text("") + ": this is not a file"});

  for (int i = 0; i < 9; ++i) folder.write(fmt::format("d{}.txtpb", i), fmt::format("include: \"d{}.txtpb\"", i + 1));
  CHECK(load(folder.path() / "d0.txtpb").errors ==
        Errors{(folder.path() / "d7.txtpb").string() + ":1:1: include " + text("d8.txtpb") +
               ": includes are nested deeper than 8 files"});

  std::string fan;
  for (int i = 0; i < 64; ++i) fan += "include: \"leaf.txtpb\"\n";
  folder.write("leaf.txtpb", "");
  const auto wide = folder.write("wide.txtpb", fan);
  CHECK(load(wide).errors ==
        Errors{wide.string() + ":64:1: include " + text("leaf.txtpb") + ": more than 64 files are included"});
}

TEST_CASE("a file that cannot be read says why") {
  const test::TemporaryFolder folder;
  const std::string none = (folder.path() / "none.txtpb").string();
  CHECK(load(none).errors == Errors{none + ":1:1: there is no such file"});
  CHECK(load(folder.path()).errors == Errors{folder.path().string() + ":1:1: this is not a file"});
  const auto large = folder.write("large.txtpb", std::string(file_bytes_max + 1, ' '));
  CHECK(load(large).errors == Errors{large.string() + ":1:1: the file is larger than 1048576 bytes"});
}

}  // namespace
}  // namespace kedge::config
