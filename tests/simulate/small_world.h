#pragma once

#include "simulate/exposure.h"
#include "simulate/scenario.h"

/// A camera small enough for tests: two detectors of 96 x 64 pixels behind four amplifiers each,
/// all on one clock, no two with the same corner on one detector; detector "q" upside down.

namespace straymark::simulate {

inline LayoutPlan small_layout() {
    LayoutPlan layout;
    layout.name = "quarters";
    layout.width = 96;
    layout.height = 64;
    layout.prescan_ticks = 4;
    layout.overscan_ticks = 12;
    layout.channels = {{"ll", 0, 0, {1, 0}, {0, 1}, 48, 32},
                       {"lr", 95, 0, {-1, 0}, {0, 1}, 48, 32},
                       {"ul", 0, 63, {1, 0}, {0, -1}, 48, 32},
                       {"ur", 95, 63, {-1, 0}, {0, -1}, 48, 32}};
    return layout;
}

inline Scenario small_scenario() {
    Scenario scenario;
    scenario.name = "small";
    scenario.seed = 5;
    scenario.site = {31.2, -110.4, 2120.0};
    scenario.telescope.focal_length_mm = 8280.0;
    scenario.telescope.aperture_mm = 2300.0;
    scenario.telescope.pointing_error_arcsec = 3.0;
    scenario.telescope.camera_angle_error_deg = 0.05;
    scenario.filters["r"] = {622.0, 138.0, 25.9, 0.1};
    scenario.seeing = {3.0, 0.05, 30.0};
    scenario.silicon = {15.0, {120000.0, 120000.0}, 0.0, 0.0};
    scenario.amplifiers = {{1.5, 2.0}, {5.0, 5.0}, {1000.0, 1000.0}, 1.0, 65535};
    scenario.coupling.device = {{1e-3, 1e-3}, 0.8, 0.0, 0.0};
    scenario.coupling.board = {{1e-4, 1e-4}, 1.0, 0.0, 0.0};
    scenario.coupling.rest = {{1e-5, 1e-5}, 1.0, 0.0, 0.0};
    scenario.clear_s = 1.0;
    scenario.readout_s = 20.0;
    scenario.layouts = {small_layout()};
    scenario.detectors = {{"p", 0, {-0.8, 0.0}, {1.0, 0.0}, {0.0, 1.0}, "main", "b1"},
                          {"q", 0, {0.8, 0.0}, {-1.0, 0.0}, {0.0, -1.0}, "main", "b2"}};
    scenario.star_list = {21.0, 19.0, 0.05, 0.03};
    scenario.fields = {{"plane", 84.0, 28.0, "", 2.5, 0.1, 10.5}};
    ExposurePlan exposure;
    exposure.id = "one";
    exposure.mjd = 61426.18;
    exposure.exposure_s = 30.0;
    exposure.filter = "r";
    exposure.field = 0;
    exposure.seeing_arcsec = 1.1;
    exposure.sky_mag_arcsec2 = 20.9;
    scenario.exposures = {exposure};
    return scenario;
}

/// The world of a scenario with the given stars in its first field; none of its random ones.
inline World world_with(const Scenario& scenario, std::vector<SkyStar> stars) {
    World world{scenario, build_instrument(scenario), {}, {}};
    world.coupling = draw_coupling(scenario, world.instrument);
    world.fields.push_back(std::move(stars));
    return world;
}

/// A flat exposure of so many electrons, in place of the scenario's.
inline ExposurePlan flat_plan(double charge_e) {
    ExposurePlan plan;
    plan.id = "flat";
    plan.kind = ExposureKind::flat;
    plan.mjd = 61426.0;
    plan.exposure_s = 1.0;
    plan.filter = "r";
    plan.flat_e = charge_e;
    return plan;
}

}  // namespace straymark::simulate
