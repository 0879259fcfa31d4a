#pragma once

#include <cstdint>
#include <span>
#include <string>
#include <vector>

#include "score/echoes.h"
#include "score/found.h"
#include "score/pixels.h"
#include "score/truth.h"

namespace straymark::score {

/// What the mask's DETECTION table says of an amplifier, against the truth.
struct AmplifierCheck {
    std::string name;
    bool stated = false;      ///< there is such a row, and it calls the amplifier usable
    double gain_ratio = 0.0;  ///< found over true
    double noise_ratio = 0.0;
};

/// Everything counted over some detectors: of one exposure, or of a night.
struct Tally {
    PixelTally pixels;
    EchoTally echoes;
    std::vector<AmplifierCheck> amplifiers;  ///< of masked detectors
    std::int64_t detectors = 0;
    std::int64_t detectors_without_mask = 0;

    Tally& operator+=(const Tally& other);
};

/// One detector of one exposure against its mask. `response`: true_response of `truth`.
Tally score_detector(const TrueDetector& truth, std::span<const float> response,
                     const FoundDetector& found);

}  // namespace straymark::score
