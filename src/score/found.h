#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "core/pixel_box.h"

/// What masks say about one exposure. Plain values, read from mask files by io/; bits are known by
/// the names that the file itself gives them.

namespace straymark::score {

/// A row of the MARKS table that stands for a single mark.
struct FoundMark {
    std::string source;    ///< "DETECTOR/AMPLIFIER"
    bool measured = true;  ///< false: rests on a prior
    double x_px = 0.0;     ///< where its response is largest, 0-based
    double y_px = 0.0;
    PixelBox box;
    double peak_e = 0.0;   ///< its extreme pixel, signed
    double error_e = 0.0;  ///< of that, 1 sigma
};

/// A row of the DETECTION table.
struct FoundAmplifier {
    std::string name;  ///< "DETECTOR/AMPLIFIER"
    bool usable = true;
    double gain_e_per_adu = 0.0;
    double noise_e = 0.0;
};

/// The values of the bits that a score looks at; 0: the file has no such bit.
struct BitValues {
    std::int32_t positive = 0;
    std::int32_t negative = 0;
    std::int32_t unassessed = 0;
    std::int32_t marginal = 0;
    std::int32_t saturated = 0;
    std::int32_t bleed = 0;
    std::int32_t defect = 0;
};

/// One detector's mask. Not present (no file, no image): every pixel counts as not flagged.
struct FoundDetector {
    bool present = false;
    BitValues values;
    std::vector<std::int16_t> bits;  ///< [y * width + x]; empty where not present
    std::vector<FoundMark> marks;    ///< of the scored artifact
    std::vector<FoundAmplifier> amplifiers;
};

}  // namespace straymark::score
