#pragma once

#include <string>
#include <vector>

#include "score/score.h"

/// The figures that masks must meet. What cannot be judged is not met.

namespace straymark::score {

inline constexpr double kLeastCompleteness = 0.98;
inline constexpr double kLargestAreaRatio = 1.15;
inline constexpr double kSlopeTolerance = 0.05;
inline constexpr double kGainTolerance = 0.05;
/// A slope of one amplifier or pair is wrong where it is off by its tolerance and this many errors.
inline constexpr double kWrongByErrors = 5.0;
inline constexpr double kPairTolerance = 0.25;
/// A pair is misplaced where the median offset of its echoes, three or more, reaches this, and most
/// of them share it: other echoes nearby move single ones, each its own way.
inline constexpr double kMisplacedPx = 0.75;
inline constexpr int kEchoesForPlace = 3;
inline constexpr double kSharedOffset = 0.6;  ///< fraction that must lie within half a pixel of it
/// A pair is missed where fewer than half of its required echoes, three or more, are found.
inline constexpr int kEchoesForMissed = 3;

struct Figure {
    std::string name;    ///< for the JSON: "pixel_completeness"
    std::string text;    ///< for people
    double value = 0.0;  ///< NaN: nothing to judge
    std::string shown;   ///< the value as people read it
    std::string target;
    bool met = false;
    std::vector<std::string> offenders;  ///< one line each, what is wrong with which
};

std::vector<Figure> figures_of(const Tally& total);
bool all_met(const std::vector<Figure>& figures);

/// numerator / denominator; NaN for nothing over nothing.
double ratio_of(std::int64_t numerator, std::int64_t denominator);
std::int64_t echoes_found(const EchoTally& tally);  ///< flagged and listed

}  // namespace straymark::score
