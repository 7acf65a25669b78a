#include "simulate/plan.h"

#include <fmt/core.h>
#include <fmt/ranges.h>

#include <array>

#include "config/load.h"
#include "config/settings.h"
#include "simulate/configuration.h"
#include "simulation/random.h"
#include "simulation/streams.h"

namespace kedge::simulate {

namespace {

using simulation::Scenario;
using simulation::ScenarioSpec;

// A demonstration has no end of its own.
constexpr double endless_s = 24.0 * 3600.0;

std::vector<std::string_view> scenario_names() {
  std::vector<std::string_view> names;
  for (const Scenario scenario : simulation::scenarios) names.push_back(simulation::name_of(scenario));
  return names;
}

Result<simulation::RangeForm> range_form(const std::string& name) {
  if (name == "distance") return simulation::RangeForm::distance;
  if (name == "single-sided") return simulation::RangeForm::single_sided;
  if (name == "double-sided") return simulation::RangeForm::double_sided;
  if (name == "second-reply") return simulation::RangeForm::second_reply;
  return Error{fmt::format("--ranging {}: give distance, single-sided, double-sided or second-reply", name)};
}

simulation::Faults faults_of(const Options& options) {
  simulation::Faults faults = options.ideal ? simulation::Faults::none() : simulation::Faults{};
  if (options.loss) faults.datagram_loss = *options.loss;
  if (options.duplicates) faults.datagram_duplicate = *options.duplicates;
  if (options.reorder) faults.datagram_held = *options.reorder;
  if (options.jitter_ms) faults.delay_jitter_s = 1e-3 * *options.jitter_ms;
  if (options.obstructed) faults.obstructed_share = *options.obstructed;
  faults.restart_after_s = options.restart_after_s;
  faults.clock_wrap_after_s = options.wrap_after_s;
  return faults;
}

Scenario suiting_scenario(const fusion::Tag& tag, std::size_t& carts) {
  if (tag.profile == fusion::Profile::flyer) return Scenario::flight;
  constexpr std::array tours = {Scenario::triangle, Scenario::rows, Scenario::stop_and_go, Scenario::straight};
  return tours.at(carts++ % tours.size());
}

// The true start lies where the configuration says, within the sigmas it states.
simulation::Placement placement_of(const fusion::Tag& tag, Scenario scenario, std::uint64_t seed) {
  if (!tag.start) return simulation::varied_placement(scenario, seed);
  simulation::Random random(seed, simulation::streams::start);
  simulation::Placement placement = simulation::default_placement(scenario);
  placement.start_m = tag.start->position_m + random.normal_vector(tag.start->position_sigma_m).head<2>();
  if (tag.start->heading_rad) {
    placement.heading_rad = *tag.start->heading_rad + tag.start->heading_sigma_rad * random.normal();
  }
  return placement;
}

Result<ScenarioSpec> spec_of_tag(const pipeline::Settings& settings, const pipeline::TagSettings& tag,
                                 Scenario scenario, std::uint64_t seed) {
  const bool flies = scenario == Scenario::flight;
  if (flies != (tag.model.profile == fusion::Profile::flyer)) {
    return Error{fmt::format("tag {}: a {} is for tags of profile {}", tag.model.name, simulation::name_of(scenario),
                             flies ? "flyer" : "wheeled")};
  }
  if (!tag.hard_iron_ut.isZero() || !tag.soft_iron.isIdentity() || tag.range_lag_ns != 0) {
    return Error{
        fmt::format("tag {}: hard iron, soft iron and range lag are not simulated; leave them out", tag.model.name)};
  }
  ScenarioSpec spec = simulation::spec_of(scenario, seed);
  spec.site = settings.site;
  spec.name = tag.model.name;
  spec.device_id = tag.device_id;
  spec.antenna_height_m = tag.model.antenna_height_m;
  spec.antenna_in_body_m = tag.model.antenna_in_body_m;
  spec.q_sensor_to_body = Quaternion(tag.R_sensor_to_body);
  spec.magnetometer = tag.model.magnetometer;
  spec.placement = placement_of(tag.model, scenario, seed);
  return spec;
}

Status add_site_tags(const Options& options, std::optional<Scenario> scenario, Plan& plan) {
  config::Loaded loaded = config::load(options.site);
  if (!loaded.merged) return Error{fmt::format("{}", fmt::join(loaded.errors, "\n"))};
  plan.configuration = *std::move(loaded.merged);
  const pipeline::Settings settings = config::settings_from(plan.configuration);
  for (const fusion::Anchor& anchor : settings.site.anchors) {
    if (anchor.range_bias_m != 0.0 || anchor.range_scale != 0.0) {
      return Error{
          fmt::format("anchor {}: configured range bias and scale are not simulated; leave them out", anchor.name)};
    }
  }
  std::size_t carts = 0;
  for (std::size_t i = 0; i < settings.tags.size(); ++i) {
    const pipeline::TagSettings& tag = settings.tags[i];
    // Seeds of a fleet must not meet those of another run's fleet.
    const std::uint64_t seed = options.seed + (static_cast<std::uint64_t>(i) << 32U);
    auto spec = spec_of_tag(settings, tag, scenario ? *scenario : suiting_scenario(tag.model, carts), seed);
    if (!spec) return Error{spec.error()};
    plan.specs.push_back(*std::move(spec));
  }
  if (plan.specs.empty()) return Error{fmt::format("{}: no tags to simulate", options.site)};
  return {};
}

Status choose_serial_tag(const Options& options, Plan& plan) {
  if (!options.has_serial()) {
    if (!options.serial_tag.empty()) return Error{"--serial-tag goes with --serial or --pty"};
    return {};
  }
  if (options.serial_tag.empty() && plan.specs.size() > 1) {
    return Error{"several tags: name the one on the serial line with --serial-tag"};
  }
  for (std::size_t i = 0; i < plan.specs.size(); ++i) {
    if (options.serial_tag.empty() || plan.specs[i].name == options.serial_tag) plan.serial_tag = i;
  }
  if (!plan.serial_tag) return Error{fmt::format("--serial-tag {}: there is no such tag", options.serial_tag)};
  return {};
}

}  // namespace

Result<Plan> make_plan(const Options& options) {
  Plan plan;
  std::optional<Scenario> scenario;
  if (!options.scenario.empty()) {
    scenario = simulation::scenario_named(options.scenario);
    if (!scenario) {
      return Error{fmt::format("no scenario '{}'; there are {}", options.scenario, fmt::join(scenario_names(), ", "))};
    }
  }
  if (!scenario && options.site.empty()) {
    return Error{fmt::format("give a scenario ({}) or a site with --site", fmt::join(scenario_names(), ", "))};
  }
  const auto form = range_form(options.ranging);
  if (!form) return Error{form.error()};

  if (options.site.empty()) {
    plan.specs.push_back(simulation::spec_of(*scenario, options.seed));
  } else if (const Status added = add_site_tags(options, scenario, plan); !added) {
    return Error{added.error()};
  }
  for (ScenarioSpec& spec : plan.specs) {
    spec.faults = faults_of(options);
    spec.range_form = *form;
    if (options.duration_s) {
      spec.duration_s = *options.duration_s;
    } else if (options.live()) {
      spec.duration_s = endless_s;
    }
  }
  if (const Status chosen = choose_serial_tag(options, plan); !chosen) return Error{chosen.error()};
  if (options.live() && options.udp.empty() && (!plan.serial_tag || plan.specs.size() > 1)) {
    return Error{"nowhere to send to: give --udp HOST:PORT or --capture FILE (or, for one tag, --serial or --pty)"};
  }
  if (options.site.empty()) {
    auto configuration = configuration_for(options, plan.specs.front());
    if (!configuration) return Error{configuration.error()};
    plan.configuration = *std::move(configuration);
  }
  return plan;
}

void begin_at(Plan& plan, TimeNs start_ns) {
  for (ScenarioSpec& spec : plan.specs) spec.start_ns = start_ns;
}

}  // namespace kedge::simulate
