#pragma once

#include <span>
#include <vector>

#include "simulate/instrument.h"

namespace straymark::simulate {

/// The image of a star through the air: an elliptical Moffat profile, integrated over pixels.
/// Source: Moffat 1969, A&A 3, 455.
class PointSpread {
public:
    /// fwhm_px: geometric mean of the two axes. major_axis: direction of the longer one in pixel
    /// coordinates, unit length. beta > 1, 0 <= ellipticity < 1.
    PointSpread(double fwhm_px, double beta, double ellipticity, Vec2 major_axis);

    /// Fraction of the light in the pixel whose centre lies `offset` from the star, pixels. Good to
    /// 1e-5 of the central pixel for a full width at half maximum of two pixels or more.
    [[nodiscard]] double in_pixel(Vec2 offset) const;
    /// Beyond this distance from a star of `light_e` no pixel receives more than `least_e`.
    [[nodiscard]] double reach_px(double light_e, double least_e) const;

private:
    [[nodiscard]] double density(Vec2 offset) const;

    double beta_, peak_, longest_px_;
    double xx_, xy_, yy_;  ///< of the quadratic form in the profile
};

/// A star where it falls on a detector.
struct StarImage {
    Vec2 pixel;
    double light_e = 0.0;
    double reach_px = 0.0;
};

/// Adds the light of `stars` to rows [first_row, end_row) of an image of `width` columns.
void paint_stars(std::span<const StarImage> stars, const PointSpread& spread, int width,
                 int first_row, int end_row, std::vector<float>& light);

}  // namespace straymark::simulate
