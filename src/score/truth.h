#pragma once

#include <string>
#include <vector>

#include "core/pixel_box.h"

/// What a simulated exposure is known to hold. Plain values, read from truth files by io/.

namespace straymark::score {

struct TrueAmplifier {
    std::string name;  ///< "DETECTOR/AMPLIFIER"
    PixelBox section;  ///< on the trimmed detector image
    double gain_e_per_adu = 0.0;
    double noise_e = 0.0;  ///< sky and read noise of one pixel, without stars; > 0
};

/// The point-spread function that the simulator used: (2 radius + 1)^2 values, row-major, sum 1.
struct TruePsf {
    int radius = 0;
    std::vector<float> values;
};

/// One echo, as the simulator injected it.
struct TrueEcho {
    std::string victim, source;  ///< "DETECTOR/AMPLIFIER"
    double x_px = 0.0;           ///< its peak, 0-based, on the victim's detector
    double y_px = 0.0;
    double total_e = 0.0;  ///< sum of its signal
    double peak_e = 0.0;   ///< its extreme pixel, signed
};

/// One detector of one exposure. The amplifiers' sections cover it without overlap.
struct TrueDetector {
    std::string id;
    int width = 0;
    int height = 0;
    TruePsf psf;
    std::vector<TrueAmplifier> amplifiers;
    std::vector<TrueEcho> echoes;
    std::vector<float> signal_e;  ///< of the artifact that is scored; [y * width + x]
};

/// The amplifier that a pixel belongs to; null outside the detector.
const TrueAmplifier* amplifier_at(const TrueDetector& detector, int x, int y);

/// sum(P^2): the inverse of the noise-equivalent area (King 1983, PASP 95, 163).
double sum_of_squares(const TruePsf& psf);

}  // namespace straymark::score
