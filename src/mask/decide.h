#pragma once

#include <array>
#include <cstdint>
#include <string>
#include <vector>

#include "artifacts/mark.h"
#include "camera/camera.h"
#include "exposure/digest.h"
#include "mask/bits.h"

/// The decision rule of docs/conventions.md, the only place that says "flagged".

namespace straymark {

struct DecisionSettings {
    std::array<double, kArtifactKinds> threshold{1.0, 1.0, 1.0, 1.0};  ///< by ArtifactKind
    int background_px = 0;
    double template_noise = 0.0;
};

/// How one mark fared: its own largest response, and what it did to the mask.
struct MarkOutcome {
    double response = 0.0;        ///< of largest magnitude, signed, of this mark alone
    double response_error = 0.0;  ///< 1 sigma, at that pixel
    DetectorPixel peak;           ///< where
    double peak_e = 0.0;          ///< of the signal, largest in magnitude, electrons per pixel
    double peak_error_e = 0.0;    ///< 1 sigma, of that pixel
    std::int64_t area_px = 0;     ///< flagged pixels within its bounds grown by one FWHM
};

/// One artifact on one detector.
struct ArtifactOutcome {
    std::vector<MarkOutcome> marks;  ///< as DetectorMarks::marks
    std::int64_t flagged_px = 0;
    std::int64_t marginal_px = 0;
    std::int64_t unassessed_px = 0;
};

/// The mask of one detector. Pixel (x, y) is bits[y * width + x].
struct DetectorMask {
    int width = 0;
    int height = 0;
    std::vector<MaskPixel> bits;
    std::array<ArtifactOutcome, kArtifactKinds> outcome;
};

/// Paints the mask of one detector from its marks (by ArtifactKind) and its digest. `defects`:
/// boxes of permanent defects. `mask` is reused. Identical for any number of threads.
void decide(const Detector& detector, const DetectorDigest& digest,
            const std::array<DetectorMarks, kArtifactKinds>& marks,
            const std::vector<PixelBox>& defects, const DecisionSettings& settings, int threads,
            DetectorMask& mask);

}  // namespace straymark
