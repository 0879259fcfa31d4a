#pragma once

#include <string>

#include "simulate/characterise.h"
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

/// For which time a product holds, MJD.
struct Validity {
    double from = 0.0;
    double to = 0.0;
};

/// A crosstalk product as a measurement of the camera would give it; with `pairs` false only what
/// is usual in each stratum, as if nothing had been measured.
void write_simulated_product(const std::string& path, const simulate::World& world,
                             const simulate::Characterisation& known, Validity validity,
                             bool pairs);

}  // namespace straymark::io
