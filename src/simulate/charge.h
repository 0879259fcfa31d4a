#pragma once

#include <cstdint>
#include <span>
#include <vector>

#include "simulate/instrument.h"

namespace straymark::simulate {

/// The charge of one detector, electrons, index y * width + x.
using Image = std::vector<float>;

/// What fills the pixels of one detector in one exposure.
struct Illumination {
    std::uint64_t seed = 0;
    int exposure = 0;
    int detector = 0;
    double even_e = 0.0;          ///< from the sky or the flat-field lamp
    double pixel_response = 0.0;  ///< 1 sigma of a pixel's sensitivity
};

/// One row of charge from the light expected there: pixel response and photon noise. `light`:
/// stars only, electrons; scaled by the pixels' response on return.
void collect_row(const Illumination& what, int row, std::span<float> light,
                 std::span<float> charge);

/// Adds the tracks of charged particles: straight, at random, with the ionisation of a
/// minimum-ionising particle in the silicon's thickness.
void add_cosmic_rays(const Illumination& what, double mean_tracks, int width, int height,
                     Image& charge);

/// Lets charge above full well flow to both sides along the columns (rows if `along_x`), half each
/// way, filling each pixel to full well; at the detector's edge it turns back. Returns what was
/// lost, electrons: not zero only where a whole column is full.
/// Promise: the sum of the charge and what was lost is what it was before (to rounding), and no
/// pixel holds more than full well.
double bleed(const Chip& chip, Image& charge);

}  // namespace straymark::simulate
