#pragma once

#include <vector>

#include "simulate/charge.h"
#include "simulate/instrument.h"

namespace straymark::simulate {

/// One pixel in the order of the clock.
struct ClockedPixel {
    int row = 0;
    int tick = 0;  ///< without prescan
    float charge_e = 0.0F;
};

/// Pixels that touch, corners included; ordered by row, then tick.
using Blob = std::vector<ClockedPixel>;

/// The blobs of pixels above `least_e` in one channel, in order of their first pixel.
std::vector<Blob> find_blobs(const Channel& channel, const Image& excess, float least_e);

}  // namespace straymark::simulate
