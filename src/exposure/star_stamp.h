#pragma once

#include <vector>

#include "camera/readout.h"
#include "exposure/plane.h"
#include "exposure/star_finder.h"

namespace straymark {

/// The pixels about one star in the detector's orientation: value of offset (i, j) from its central
/// pixel at (j + radius) * (2 radius + 1) + i + radius. ADU above sky; NaN: none, or not on the
/// amplifier.
struct StarStamp {
    int radius = 0;
    std::vector<float> values;
    double dx = 0.0;  ///< the star's centroid from the central pixel, detector axes
    double dy = 0.0;
    double sigma_px = 0.0;
    double flux_adu = 0.0;
    double signal_to_noise = 0.0;
    PixelNoise noise;

    [[nodiscard]] float at(int i, int j) const {
        return values[static_cast<std::size_t>(j + radius) * static_cast<std::size_t>(side()) +
                      static_cast<std::size_t>(i + radius)];
    }
    [[nodiscard]] int side() const { return 2 * radius + 1; }
};

StarStamp cut_stamp(const AmplifierPlane& signal, const ReadoutGeometry& readout,
                    const StarCandidate& star, const PixelNoise& noise, int radius);

}  // namespace straymark
