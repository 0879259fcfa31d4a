#pragma once

#include "io/yaml.h"
#include "simulate/scenario.h"

/// The part of a scenario that builds the camera: `layouts` and `detectors`.

namespace straymark::io {

/// Sets `scenario.layouts` and `scenario.detectors`. Throws InputError as `read_scenario` says.
void read_scenario_camera(const YamlMapping& top, simulate::Scenario& scenario);

}  // namespace straymark::io
