#pragma once

#include <string>

#include "simulate/characterise.h"
#include "simulate/exposure.h"

/// The text files that describe a simulated observatory to the rest of the program: this is where
/// its positions and direction vectors are put into the camera file's angles and corners.

namespace straymark::io {

std::string simulated_camera_file(const simulate::World& world,
                                  const simulate::Characterisation& known);
std::string simulated_amplifier_table(const simulate::World& world);
/// Pairs whose echo comes whole ticks late; empty: none does.
std::string simulated_pair_table(const simulate::World& world,
                                 const simulate::Characterisation& known);
std::string simulated_site_file(const simulate::World& world, const std::string& calibrations);

}  // namespace straymark::io
