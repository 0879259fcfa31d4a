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

/// Location by Tukey's biweight (c = 4.685, from the median, MAD scale); scale 1.4826 MAD.
/// NaN are left out. count == 0 leaves location and scale NaN.
/// Source: Mosteller & Tukey 1977, Data Analysis and Regression, ch. 10.
RobustStats biweight(std::span<const double> values);

/// Huber's M-estimate of location with fixed `scale` and tuning constant k (1.345 by default).
/// Source: Huber 1964, Ann. Math. Statist. 35, 73.
double huber_location(std::span<const double> values, double scale, double k = 1.345);

/// Location (clipped mean about the median) and scale of a large pixel sample whose bright tail is
/// stars: iterates a window of +-3 scale about the location, with the scale corrected for the
/// truncation, so that the result is unbiased for a normal core with a few per cent of stars on
/// top. NaN are left out. Deterministic.
RobustStats clipped_normal(std::span<const float> values);

}  // namespace straymark
