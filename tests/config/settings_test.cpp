#include "config/settings.h"

#include <catch2/catch.hpp>
#include <numbers>

#include "config/load.h"

namespace kedge::config {
namespace {

constexpr double pi = std::numbers::pi;

pipeline::Settings settings_of(const std::string& more, const std::string& site = "") {
  const Loaded loaded =
      load_text("site { name: \"yard\" " + site +
                    " }\nanchors { name: \"mast\" anchor_id: 7 east_m: 1 north_m: 2 up_m: 3 }\n" + more,
                "t");
  INFO((loaded.errors.empty() ? std::string() : loaded.errors.front()));
  REQUIRE(loaded.merged.has_value());
  return settings_from(*loaded.merged);
}

TEST_CASE("the defaults of the configuration are those of the plain settings") {
  const pipeline::Settings settings = settings_of("tags { name: \"cart-1\" device_id: 11 }");
  const pipeline::Limits& limits = settings.limits;
  const pipeline::Limits plain;
  CHECK(limits.settled_enter_m == plain.settled_enter_m);
  CHECK(limits.settled_leave_m == plain.settled_leave_m);
  CHECK(limits.lost_radius_m == plain.lost_radius_m);
  CHECK(limits.range_max_m == plain.range_max_m);
  CHECK(limits.tick_ns == plain.tick_ns);
  CHECK(limits.delay_max_ns == plain.delay_max_ns);
  CHECK(limits.range_stale_ns == plain.range_stale_ns);
  CHECK(limits.inertial_stale_ns == plain.inertial_stale_ns);
  CHECK(limits.anchor_silent_ns == plain.anchor_silent_ns);
  CHECK(limits.silent_ns == plain.silent_ns);
  CHECK(limits.rate_window_ns == plain.rate_window_ns);
  CHECK(limits.health_period_ns == plain.health_period_ns);
  CHECK(limits.missing_share_max == plain.missing_share_max);
  CHECK(limits.unknown_devices_max == plain.unknown_devices_max);

  const fusion::Site site;
  CHECK(settings.site.gravity_mps2 == site.gravity_mps2);
  CHECK(settings.site.propagation_speed_mps == site.propagation_speed_mps);
  CHECK(settings.site.ground_up_m == site.ground_up_m);
  CHECK_FALSE(settings.site.field_ut.has_value());
  CHECK_FALSE(settings.site.dip_rad.has_value());
  CHECK_FALSE(settings.site.extent.has_value());
  const fusion::Anchor anchor;
  CHECK(settings.site.anchors.at(0).range_sigma_m == anchor.range_sigma_m);
  CHECK(settings.site.anchors.at(0).range_bias_m == anchor.range_bias_m);
  CHECK(settings.site.anchors.at(0).range_scale == anchor.range_scale);

  const fusion::Tag& model = settings.tags.at(0).model;
  const fusion::Tag tag;
  CHECK(model.profile == tag.profile);
  CHECK(model.method == tag.method);
  CHECK(model.antenna_height_m == tag.antenna_height_m);
  CHECK(model.height_sigma_m == tag.height_sigma_m);
  CHECK(model.speed_max_mps == tag.speed_max_mps);
  CHECK(model.magnetometer == tag.magnetometer);
  CHECK(model.magnetic_heading_sigma_rad == tag.magnetic_heading_sigma_rad);
  CHECK(model.inertial.gyro_noise_radps_rthz == tag.inertial.gyro_noise_radps_rthz);
  CHECK(model.inertial.accel_noise_mps2_rthz == Approx(tag.inertial.accel_noise_mps2_rthz).epsilon(1e-12));
  CHECK(model.inertial.gyro_bias_sigma_radps == tag.inertial.gyro_bias_sigma_radps);
  CHECK(model.inertial.accel_bias_sigma_mps2 == tag.inertial.accel_bias_sigma_mps2);
  CHECK(model.inertial.vibration_sigma_mps2 == tag.inertial.vibration_sigma_mps2);
  CHECK(model.inertial.gyro_full_scale_radps == tag.inertial.gyro_full_scale_radps);
  CHECK(model.inertial.accel_full_scale_mps2 == tag.inertial.accel_full_scale_mps2);
  CHECK(model.antenna_in_body_m.isZero());
  CHECK_FALSE(model.start.has_value());
  CHECK(settings.tags[0].R_sensor_to_body.isIdentity());
  CHECK(settings.tags[0].hard_iron_ut.isZero());
  CHECK(settings.tags[0].soft_iron.isIdentity());
  CHECK(settings.tags[0].range_lag_ns == 0);
  CHECK_FALSE(settings.tags[0].battery_low_v.has_value());
}

TEST_CASE("bearings from true north become headings from site east") {
  const std::string start =
      "start { east_m: 4 north_m: -5 position_sigma_m: 0.5 heading_deg: 30 heading_sigma_deg: 9 }";
  const std::string tag = "tags { name: \"a\" device_id: 1 " + start + " }";
  SECTION("site along true north: heading is 90 degrees minus bearing") {
    const pipeline::Settings settings = settings_of(tag, "declination_deg: 3");
    const fusion::Start& from = *settings.tags[0].model.start;
    CHECK(*from.heading_rad == Approx(pi / 3));
    CHECK(from.heading_sigma_rad == Approx(pi / 20));
    CHECK(from.position_m == Vector2(4, -5));
    CHECK(from.position_sigma_m == 0.5);
    CHECK(settings.site.magnetic_north_heading_rad == Approx(radians(87)));
  }
  SECTION("site whose y axis points to 30 degrees: that bearing is along y") {
    const pipeline::Settings settings = settings_of(tag, "bearing_deg: 30 declination_deg: -2");
    CHECK(settings.site.bearing_rad == Approx(pi / 6));
    CHECK(*settings.tags[0].model.start->heading_rad == Approx(pi / 2));
    // Magnetic north lies 2 degrees west of true north, so 32 degrees left of y.
    CHECK(settings.site.magnetic_north_heading_rad == Approx(radians(122)));
  }
}

TEST_CASE("everything that is written reaches the settings, in SI units") {
  const pipeline::Settings settings =
      settings_of(R"(
    tags {
      name: "a" device_id: 5 profile: flyer method: plain antenna_height_m: 1.5 height_sigma_m: 0.2
      mounting { roll_deg: 180 yaw_deg: 90 antenna_forward_m: 0.1 antenna_left_m: 0.2 antenna_up_m: 0.3 }
      inertial { gyro_noise_degps_rthz: 0.01 accel_noise_ug_rthz: 100 gyro_bias_degps: 1 accel_bias_mps2: 0.2
                 vibration_mps2: 0.7 gyro_full_scale_degps: 500 accel_full_scale_g: 8 }
      magnetometer { present: false hard_iron_ut: [1, 2, 3] soft_iron: [1, 2, 3, 4, 5, 6, 7, 8, 10] heading_sigma_deg: 6 }
      range_lag_s: 0.02 battery_low_v: 3.4
    }
    tags { name: "b" device_id: 6 method: speed_aided speed_max_mps: 4 }
    tags { name: "c" device_id: 7 }
    anchors { name: "pole" anchor_id: 8 east_m: 9 north_m: 10 up_m: 11 range_sigma_m: 0.3 range_bias_m: 0.1
              range_scale: 0.07 device_id: 1008 }
    links { name: "radio" udp { port: 1 } }
    links { name: "line" serial { device: "d" } }
    limits { tick_hz: 20 settled_enter_m: 1 settled_leave_m: 4 lost_radius_m: 60 range_max_m: 200 delay_max_s: 0.5
             range_stale_s: 3 inertial_stale_s: 4 anchor_silent_s: 6 silent_s: 7 rate_window_s: 8 missing_share_max: 0.5
             unknown_devices_max: 3 health_period_s: 9 }
    method: plain)",
                  "gravity_mps2: 9.81 propagation_speed_mps: 299702000 field_ut: 50 dip_deg: 60 "
                  "ground_up_m: -2 extent { east_min_m: -1 east_max_m: 2 north_min_m: -3 "
                  "north_max_m: 4 }");
  CHECK(settings.site.name == "yard");
  CHECK(settings.site.gravity_mps2 == 9.81);
  CHECK(settings.site.propagation_speed_mps == 299702000);
  CHECK(settings.site.field_ut == 50.0);
  CHECK(*settings.site.dip_rad == Approx(pi / 3));
  CHECK(settings.site.ground_up_m == -2);
  CHECK(settings.site.extent->low_m == Vector2(-1, -3));
  CHECK(settings.site.extent->high_m == Vector2(2, 4));
  REQUIRE(settings.site.anchors.size() == 2);
  const fusion::Anchor& pole = settings.site.anchors[1];
  CHECK(pole.name == "pole");
  CHECK(pole.anchor_id == 8);
  CHECK(pole.position_m == Vector3(9, 10, 11));
  CHECK(pole.range_sigma_m == 0.3);
  CHECK(pole.range_bias_m == 0.1);
  CHECK(pole.range_scale == 0.07);
  CHECK(settings.anchor_devices == std::vector<std::uint32_t>{1008});

  const pipeline::TagSettings& a = settings.tags.at(0);
  CHECK(a.model.name == "a");
  CHECK(a.device_id == 5);
  CHECK(a.model.profile == fusion::Profile::flyer);
  CHECK(a.model.method == fusion::Method::plain);
  CHECK(a.model.antenna_height_m == 1.5);
  CHECK(a.model.height_sigma_m == 0.2);
  CHECK(a.model.speed_max_mps == 15.0);
  CHECK(a.model.antenna_in_body_m == Vector3(0.1, 0.2, 0.3));
  CHECK(a.model.inertial.gyro_noise_radps_rthz == Approx(pi / 18000));
  CHECK(a.model.inertial.accel_noise_mps2_rthz == Approx(9.80665e-4));
  CHECK(a.model.inertial.gyro_bias_sigma_radps == Approx(pi / 180));
  CHECK(a.model.inertial.accel_bias_sigma_mps2 == 0.2);
  CHECK(a.model.inertial.vibration_sigma_mps2 == 0.7);
  CHECK(a.model.inertial.gyro_full_scale_radps == Approx(500 * pi / 180));
  CHECK(a.model.inertial.accel_full_scale_mps2 == Approx(8 * 9.80665));
  CHECK_FALSE(a.model.magnetometer);
  CHECK(a.magnetometer_calibrated);
  CHECK(a.hard_iron_ut == Vector3(1, 2, 3));
  CHECK(a.soft_iron(0, 1) == 2);
  CHECK(a.soft_iron(2, 0) == 7);
  CHECK(a.model.magnetic_heading_sigma_rad == Approx(pi / 30));
  CHECK(a.range_lag_ns == 20 * ns_per_ms);
  CHECK(a.battery_low_v == 3.4);
  // Upside down about x, then a quarter turn left about z: sensor x looks left, sensor y forward.
  CHECK((a.R_sensor_to_body * Vector3::UnitX() - Vector3::UnitY()).norm() < 1e-12);
  CHECK((a.R_sensor_to_body * Vector3::UnitY() - Vector3::UnitX()).norm() < 1e-12);
  CHECK((a.R_sensor_to_body * Vector3::UnitZ() + Vector3::UnitZ()).norm() < 1e-12);

  CHECK(settings.tags.at(1).model.method == fusion::Method::speed_aided);
  CHECK(settings.tags.at(1).model.speed_max_mps == 4.0);
  CHECK(settings.tags.at(2).model.method == fusion::Method::plain);
  CHECK_FALSE(settings.tags.at(2).magnetometer_calibrated);

  REQUIRE(settings.links.size() == 2);
  CHECK(settings.links[0].name == "radio");
  CHECK(settings.links[0].kind == pipeline::LinkKind::udp);
  CHECK(settings.links[1].kind == pipeline::LinkKind::serial);

  const pipeline::Limits& limits = settings.limits;
  CHECK(limits.tick_ns == 50 * ns_per_ms);
  CHECK(limits.settled_enter_m == 1);
  CHECK(limits.settled_leave_m == 4);
  CHECK(limits.lost_radius_m == 60);
  CHECK(limits.range_max_m == 200);
  CHECK(limits.delay_max_ns == 500 * ns_per_ms);
  CHECK(limits.range_stale_ns == 3 * ns_per_s);
  CHECK(limits.inertial_stale_ns == 4 * ns_per_s);
  CHECK(limits.anchor_silent_ns == 6 * ns_per_s);
  CHECK(limits.silent_ns == 7 * ns_per_s);
  CHECK(limits.rate_window_ns == 8 * ns_per_s);
  CHECK(limits.health_period_ns == 9 * ns_per_s);
  CHECK(limits.missing_share_max == 0.5);
  CHECK(limits.unknown_devices_max == 3);
}

}  // namespace
}  // namespace kedge::config
