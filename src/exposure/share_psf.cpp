#include <algorithm>
#include <cmath>
#include <span>
#include <vector>

#include "core/robust.h"
#include "exposure/measure.h"
#include "exposure/psf_measure.h"

namespace straymark {
namespace {

/// Value at offset (i, j), zero beyond the grid.
float value_at(const Psf& psf, int i, int j) {
    if (std::abs(i) > psf.radius || std::abs(j) > psf.radius) {
        return 0.0F;
    }
    return psf.values[(j + psf.radius) * (2 * psf.radius + 1) + i + psf.radius];
}

Psf median_psf(const std::vector<const Psf*>& measured) {
    Psf psf;
    psf.source = PsfSource::neighbours;
    std::vector<double> widths;
    for (const Psf* other : measured) {
        psf.radius = std::max(psf.radius, other->radius);
        psf.stars += other->stars;
        widths.push_back(other->fwhm_px);
    }
    psf.fwhm_px = median_in_place(std::span<double>(widths));
    std::vector<float> values;
    for (int j = -psf.radius; j <= psf.radius; ++j) {
        for (int i = -psf.radius; i <= psf.radius; ++i) {
            values.clear();
            for (const Psf* other : measured) {
                values.push_back(value_at(*other, i, j));
            }
            psf.values.push_back(static_cast<float>(median_in_place(std::span<float>(values))));
        }
    }
    normalize_psf(psf);
    return psf;
}

}  // namespace

void share_psf(ExposureDigest& digest) {
    std::vector<const Psf*> measured;
    for (const DetectorDigest& detector : digest.detectors) {
        if (detector.psf.source == PsfSource::measured) {
            measured.push_back(&detector.psf);
        }
    }
    if (measured.empty()) {
        return;
    }
    const Psf shared = median_psf(measured);
    for (DetectorDigest& detector : digest.detectors) {
        if (detector.psf.source == PsfSource::none) {
            detector.psf = shared;
        }
    }
}

}  // namespace straymark
