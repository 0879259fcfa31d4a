#include "exposure/detector_stars.h"

#include <algorithm>
#include <cmath>
#include <span>
#include <tuple>

#include "core/robust.h"
#include "exposure/moffat.h"
#include "exposure/psf_measure.h"

namespace straymark {
namespace {

/// A candidate is a star where its size, in units of the median's, lies between these.
constexpr double kSmallestStar = 0.75;
constexpr double kLargestStar = 1.35;

double median_size(const std::vector<std::vector<StarCandidate>>& candidates) {
    std::vector<double> sizes;
    for (const auto& amplifier : candidates) {
        for (const StarCandidate& star : amplifier) {
            sizes.push_back(star.sigma_px);
        }
    }
    return sizes.empty() ? 0.0 : median_in_place(std::span<double>(sizes));
}

Psf seeing_profile(double fwhm_px) {
    const MoffatShape shape = MoffatShape::circular(fwhm_px, kSeeingBeta);
    const PixelQuadrature quadrature = PixelQuadrature::for_fwhm(fwhm_px);
    Psf psf;
    psf.radius = psf_radius(fwhm_px);
    for (int j = -psf.radius; j <= psf.radius; ++j) {
        for (int i = -psf.radius; i <= psf.radius; ++i) {
            psf.values.push_back(static_cast<float>(quadrature.value(shape, i, j)));
        }
    }
    normalize_psf(psf);
    return psf;
}

/// Part of a star's light that its aperture, less its annulus, holds.
double aperture_fraction(const Psf& psf, double aperture_px) {
    const int side = 2 * psf.radius + 1;
    const auto sum =
        aperture_sum(psf.values.data(), side, side, psf.radius, psf.radius, aperture_px);
    return sum && sum->flux > 0.0 ? sum->flux : 1.0;
}

MeasuredStar on_detector(const Amplifier& amplifier, const StarCandidate& star, double fraction) {
    const ReadoutGeometry& readout = amplifier.readout;
    const ReadoutIndex whole{static_cast<int>(std::lround(star.tick)),
                             static_cast<int>(std::lround(star.row))};
    const DetectorPixel pixel = readout.detector_from_readout(whole);
    const double d_tick = star.tick - whole.tick;
    const double d_row = star.row - whole.row;
    const double scale = amplifier.gain_e_per_adu / fraction;
    MeasuredStar measured;
    measured.position = {pixel.x + d_tick * readout.tick_dx() + d_row * readout.row_dx(),
                         pixel.y + d_tick * readout.tick_dy() + d_row * readout.row_dy()};
    measured.flux_e = static_cast<float>(star.flux_adu * scale);
    measured.flux_error_e = static_cast<float>(star.flux_error_adu * scale);
    measured.position_error_px = static_cast<float>(star.position_error_px);
    return measured;
}

}  // namespace

std::vector<MeasuredStar> detector_stars(const Detector& detector,
                                         const std::vector<std::vector<StarCandidate>>& candidates,
                                         const Psf& psf) {
    const double size = median_size(candidates);
    std::vector<MeasuredStar> stars;
    if (size == 0.0) {
        return stars;
    }
    const Psf corrector = psf.source == PsfSource::none ? seeing_profile(kSigmaToFwhm * size) : psf;
    for (std::size_t a = 0; a < candidates.size(); ++a) {
        if (candidates[a].empty()) {
            continue;
        }
        // All apertures of one amplifier are equal.
        const double fraction = aperture_fraction(corrector, candidates[a].front().aperture_px);
        for (const StarCandidate& star : candidates[a]) {
            if (star.sigma_px >= kSmallestStar * size && star.sigma_px <= kLargestStar * size) {
                stars.push_back(on_detector(detector.amplifiers[a], star, fraction));
            }
        }
    }
    std::sort(stars.begin(), stars.end(), [](const MeasuredStar& a, const MeasuredStar& b) {
        return std::tuple(-a.flux_e, a.position.y_px, a.position.x_px) <
               std::tuple(-b.flux_e, b.position.y_px, b.position.x_px);
    });
    return stars;
}

}  // namespace straymark
