#pragma once

#include <optional>
#include <span>
#include <vector>

#include "core/frames.h"

/// Plane geometry of matching measured stars with listed ones, in the focal plane. Knows nothing of
/// telescopes: a small error of pointing and camera angle is a shift and a turn of the whole plane.

namespace straymark {

/// A turn about the origin (counter-clockwise, x right and y up), then a shift.
struct PlaneMotion {
    double turn_rad = 0.0;
    double dx_mm = 0.0;
    double dy_mm = 0.0;
    [[nodiscard]] FocalPoint applied(FocalPoint point) const;
    /// The point that `applied` takes to `point`.
    [[nodiscard]] FocalPoint undone(FocalPoint point) const;
};

/// How far the expected places may be off.
struct MotionRange {
    double shift_mm = 0.0;  ///< on each axis
    double turn_rad = 0.0;  ///< to either side
    double bin_mm = 0.0;    ///< the vote's resolution, some pixels
};

/// The motion that takes most of `expected` to places of `measured`, to within two bins: every turn
/// in range is tried, and every pair votes for its shift. Give the brightest stars of both; false
/// and missing ones do no harm. Nothing where no pair has a vote.
std::optional<PlaneMotion> voted_motion(std::span<const FocalPoint> measured,
                                        std::span<const FocalPoint> expected,
                                        const MotionRange& range);
/// Number of motions that `voted_motion` tells apart.
double motions_tried(std::span<const FocalPoint> expected, const MotionRange& range);

struct StarPair {
    int measured = 0;
    int expected = 0;
    double distance_mm = 0.0;
};
/// Pairs in which each star is the other's nearest, no farther than `radius_mm` apart.
std::vector<StarPair> nearest_pairs(std::span<const FocalPoint> measured,
                                    std::span<const FocalPoint> moved_expected, double radius_mm);

/// The motion that brings the expected places of the pairs closest to the measured ones, by least
/// squares. Precondition: at least two pairs.
PlaneMotion fitted_motion(std::span<const FocalPoint> measured,
                          std::span<const FocalPoint> expected, std::span<const StarPair> pairs);

/// Natural logarithm of the probability of `count` or more chance coincidences where `mean` are
/// expected (Poisson; an upper bound by Chernoff).
double log_chance(int count, double mean);

}  // namespace straymark
