#pragma once

#include <optional>
#include <vector>

#include "camera/readout.h"
#include "exposure/plane.h"

namespace straymark {

/// An unsaturated point source on one amplifier, not yet corrected for what its aperture misses.
struct StarCandidate {
    double tick = 0.0;  ///< centroid, read-out index
    double row = 0.0;
    double position_error_px = 0.0;  ///< along each axis
    double sigma_px = 0.0;           ///< of the Gaussian whose windowed second moment it has
    double flux_adu = 0.0;           ///< inside the aperture, local sky subtracted
    double flux_error_adu = 0.0;
    double aperture_px = 0.0;  ///< radius
    bool isolated = false;     ///< nothing but noise around it that its mirror image does not have

    [[nodiscard]] double signal_to_noise() const { return flux_adu / flux_error_adu; }
};

/// Full width at half maximum of a Gaussian of standard deviation one.
inline constexpr double kSigmaToFwhm = 2.3548200450309493;

/// Noise of an amplifier's pixels: variance = noise^2 + signal / gain, in ADU.
struct PixelNoise {
    double noise_adu = 0.0;
    double gain_e_per_adu = 1.0;
};

/// Finds the brightest stars of a plane of signal above sky (NaN: saturated or no value), brightest
/// first. At most kMostStars of an amplifier. Peaks as sharp as cosmic rays, images that reach the
/// border, saturated or missing pixels, and second maxima of the same image are left out.
/// Centroid: Gaussian-windowed, window matched to the image, so that its error is near the least
/// possible for a faint star (Bernstein & Jarvis 2002, AJ 123, 583, section 3).
std::vector<StarCandidate> find_stars(const AmplifierPlane& signal, const PixelNoise& noise);
inline constexpr int kMostStars = 256;

/// Sky annulus about an aperture: begins and ends at these multiples of the aperture's radius.
inline constexpr double kAnnulusInner = 2.0;
inline constexpr double kAnnulusOuter = 3.0;
/// Radius of the aperture in units of the image's sigma.
inline constexpr double kApertureSigmas = 3.2;

struct ApertureSum {
    double flux = 0.0;        ///< sum in the aperture less the annulus' median
    double area_px = 0.0;     ///< of the aperture
    double annulus_px = 0.0;  ///< pixels in the annulus
};

/// Sum within `radius` of (x, y) on a grid of `width` by `height` values; a pixel at the rim counts
/// by the part of its width that lies inside. The sky is the median of the annulus' finite pixels.
/// Nothing where a pixel of the aperture is missing, or the annulus has fewer than half its pixels.
std::optional<ApertureSum> aperture_sum(const float* values, int width, int height, double x,
                                        double y, double radius);

}  // namespace straymark
