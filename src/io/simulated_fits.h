#pragma once

#include <string>

#include "simulate/exposure.h"

/// The FITS files of a simulated night, each complete or not at all.

namespace straymark::io {

/// One 16-bit image for each amplifier, named DETECTOR_AMPLIFIER, pixels in the order of the clock,
/// prescan and overscan included.
void write_simulated_raw(const std::string& path, const simulate::World& world,
                         const simulate::SimulatedExposure& exposure);

/// What is true of the exposure (docs/methods/simulator.md): images DETECTOR.crosstalk and
/// DETECTOR.psf, tables AMPLIFIERS and ECHOES. Precondition: the exposure has a truth.
void write_simulated_truth(const std::string& path, const simulate::World& world,
                           const simulate::SimulatedExposure& exposure, int threads);

}  // namespace straymark::io
