#pragma once

#include <cstdint>
#include <map>
#include <span>
#include <string>
#include <utility>
#include <vector>

#include "score/echoes.h"

/// Predicted on true strength: slopes through the origin and pulls.

namespace straymark::score {

/// Fractional errors below this count as this: no prediction is better than its simulated charge.
inline constexpr double kSmallestFraction = 1e-3;

/// predicted = value * truth. No pairs: value and error are NaN.
struct Slope {
    double value = 0.0;
    double error = 0.0;
    std::int64_t pairs = 0;   ///< amplifier pairs that it rests on
    std::int64_t groups = 0;  ///< matches (StrengthMatch)
};

/// One pair's slope: its ratios weighted by the inverse squares of their fractional errors. All
/// echoes of a pair share the error of its coefficient, so they do not average: the error is their
/// weighted mean. Precondition: all of one victim and source.
Slope pair_slope(std::span<const StrengthMatch> matches);

/// Slope over pairs, which are independent: Tukey's biweight (c = 4.685) of the pairs' slopes from
/// their weighted median, weights inverse to their squared errors; the error is scaled by the
/// pairs' scatter (1.4826 MAD) where that exceeds what the errors say and five pairs or more show
/// it.
Slope slope_over_pairs(std::span<const StrengthMatch> matches);

using PairName = std::pair<std::string, std::string>;  ///< victim, source
std::map<PairName, std::vector<StrengthMatch>> by_pair(std::span<const StrengthMatch> matches);
std::map<std::string, std::vector<StrengthMatch>> by_victim(std::span<const StrengthMatch> matches);

/// (predicted - truth) / error.
struct Pulls {
    double mean = 0.0;
    double rms = 0.0;
    std::int64_t count = 0;
};
/// Matches without an error are left out.
Pulls pulls_of(std::span<const StrengthMatch> matches);

}  // namespace straymark::score
