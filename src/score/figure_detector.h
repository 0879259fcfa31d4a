#pragma once

#include <cstddef>
#include <cstdint>
#include <vector>

#include "score/found.h"
#include "score/truth.h"

namespace straymark::score {

/// One detector as a picture needs it.
struct FigureDetector {
    TrueDetector truth;
    std::vector<float> response;  ///< true_response of `truth`
    FoundDetector found;
};

/// What a pixel's flag is worth.
enum class PixelClass : std::uint8_t {
    clear,
    found,    ///< true area, flagged
    missed,   ///< had to be flagged
    outside,  ///< flagged, not of the true area
    between,  ///< true area, not flagged, need not be
    unknown,  ///< marginal or unassessed, nothing true
    count
};

PixelClass class_of(const FigureDetector& detector, std::size_t index);

}  // namespace straymark::score
