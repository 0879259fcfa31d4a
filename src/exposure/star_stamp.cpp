#include "exposure/star_stamp.h"

#include <cmath>
#include <limits>

namespace straymark {

StarStamp cut_stamp(const AmplifierPlane& signal, const ReadoutGeometry& readout,
                    const StarCandidate& star, const PixelNoise& noise, int radius) {
    const int tick = static_cast<int>(std::lround(star.tick));
    const int row = static_cast<int>(std::lround(star.row));
    const double d_tick = star.tick - tick;
    const double d_row = star.row - row;
    StarStamp stamp;
    stamp.radius = radius;
    stamp.dx = d_tick * readout.tick_dx() + d_row * readout.row_dx();
    stamp.dy = d_tick * readout.tick_dy() + d_row * readout.row_dy();
    stamp.sigma_px = star.sigma_px;
    stamp.flux_adu = star.flux_adu;
    stamp.signal_to_noise = star.signal_to_noise();
    stamp.noise = noise;
    stamp.values.reserve(static_cast<std::size_t>(stamp.side()) *
                         static_cast<std::size_t>(stamp.side()));
    for (int j = -radius; j <= radius; ++j) {
        for (int i = -radius; i <= radius; ++i) {
            // The steps are a signed permutation: its transpose is its inverse.
            const int t = tick + i * readout.tick_dx() + j * readout.tick_dy() - signal.first_tick;
            const int r = row + i * readout.row_dx() + j * readout.row_dy() - signal.first_row;
            stamp.values.push_back(signal.holds(t, r) ? signal.at(t, r)
                                                      : std::numeric_limits<float>::quiet_NaN());
        }
    }
    return stamp;
}

}  // namespace straymark
