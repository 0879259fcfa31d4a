#pragma once

#include <span>

namespace straymark {

/// Robust location and scale of a sample.
struct RobustStats {
    double location = 0.0;
    double scale = 0.0;  ///< standard deviation of the normal with the same spread
    int count = 0;       ///< finite values used
};

/// 1.4826: median absolute deviation to standard deviation of a normal.
inline constexpr double kMadToSigma = 1.4826022185056018;

/// Median by selection; mean of the middle two for an even count. Reorders `values`.
/// Precondition: not empty, no NaN.
double median_in_place(std::span<float> values);
double median_in_place(std::span<double> values);

/// Location by Tukey's biweight (c = 4.685, iterated from the median at the MAD's scale); scale
/// 1.4826 MAD. Values that are not finite are left out. count == 0 leaves location and scale NaN.
/// Source: Mosteller & Tukey 1977, Data Analysis and Regression, ch. 10.
RobustStats biweight(std::span<const double> values);

/// Huber's M-estimate of location with fixed `scale` > 0 and tuning constant k (1.345 by default).
/// Precondition: not empty, all finite.
/// Source: Huber 1964, Ann. Math. Statist. 35, 73.
double huber_location(std::span<const double> values, double scale, double k = 1.345);

/// Location and scale of the normal core of a large pixel sample whose bright tail is stars. Within
/// a window of +-3 scale about the location, the histogram is fitted by a normal and a tail that
/// rises through the core as light added to it does (density proportional to the normal's
/// cumulative distribution), so truncation, tail and whole-number values bias neither. For a core
/// with 5 % of stars on top: location and scale to 1 % of the scale, plus the statistical error.
/// At most 131,072 values, evenly strided, are looked at; `count` says how many
/// were finite. Deterministic. Values most of which are equal have scale 0, unless they come in
/// even steps, as raw counts do: then noise down to a third of a step is found.
RobustStats clipped_normal(std::span<const float> values);

}  // namespace straymark
