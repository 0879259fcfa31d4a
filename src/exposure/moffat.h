#pragma once

#include <array>

namespace straymark {

/// Elliptical Moffat profile of central height one, (1 + a dx^2 + 2 b dx dy + c dy^2)^-beta.
/// Valid: a > 0, c > 0, a c > b^2, beta > 1. Source: Moffat 1969, A&A 3, 455.
struct MoffatShape {
    double a = 1.0;  ///< per square pixel
    double b = 0.0;
    double c = 1.0;
    double beta = 3.0;

    /// The circular one of full width at half maximum `fwhm_px`.
    static MoffatShape circular(double fwhm_px, double beta);
    /// Geometric mean over both axes of the full width at half maximum.
    [[nodiscard]] double fwhm() const;
    /// Integral over the plane, pixels.
    [[nodiscard]] double volume() const;
    [[nodiscard]] bool valid() const;
};

/// Mean of a profile over one pixel, with its derivatives.
struct MoffatPixel {
    double value = 0.0;
    double d_dx = 0.0;  ///< by the pixel's offset from the centre
    double d_dy = 0.0;
    std::array<double, 4> d_shape{};  ///< by a, b, c, beta
};

/// Gauss-Legendre rule of a pixel, `points` (1 to 3) along each axis. Wide profiles need fewer: one
/// point is exact to 1e-3 of the peak from FWHM 8 on, two to 1e-3 from 2 px on.
class PixelQuadrature {
public:
    explicit PixelQuadrature(int points);
    /// The fewest points that are good for profiles of this width.
    static PixelQuadrature for_fwhm(double fwhm_px);

    [[nodiscard]] double value(const MoffatShape& shape, double dx, double dy) const;
    [[nodiscard]] MoffatPixel derivatives(const MoffatShape& shape, double dx, double dy) const;

private:
    int points_;
    std::array<double, 3> node_{};
    std::array<double, 3> weight_{};
};

}  // namespace straymark
