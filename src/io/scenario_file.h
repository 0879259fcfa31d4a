#pragma once

#include <string>
#include <vector>

#include "simulate/scenario.h"
#include "simulate/starfield.h"

namespace straymark::io {

/// Reads the scenario of a simulated night (docs/scenario_file.md). Paths in it are resolved
/// against its own folder. Throws InputError with line and column for anything unknown, missing, of
/// another type or out of range, and for a camera that cannot be built (amplifiers beyond their
/// detector, directions not at right angles, amplifiers of one clock with different numbers of
/// ticks or rows).
simulate::Scenario read_scenario(const std::string& path);

/// The bright stars of a field's file: columns ra_deg, dec_deg (ICRS), vt_mag; others are ignored.
std::vector<simulate::SkyStar> read_bright_stars(const std::string& path);

}  // namespace straymark::io
