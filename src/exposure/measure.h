#pragma once

#include "camera/camera.h"
#include "exposure/digest.h"
#include "exposure/frame.h"
#include "sky/stars.h"

namespace straymark {

/// How much of the pixels a digest keeps.
struct DigestPolicy {
    /// Pixels brighter than this many times the amplifier's noise are kept; 3 or more.
    double floor_sigma = 5.0;
};

/// Reads every amplifier of `frame` once and keeps what matters: bias and overscan removed
/// robustly, noise, sky, bright and saturated runs, bleed, stars, PSF. Amplifiers in parallel. An
/// amplifier that cannot be read or says nothing is recorded as missing or unusable with its
/// reason. Deterministic for any number of threads.
DetectorDigest measure_detector(const Camera& camera, int detector, DetectorFrame& frame,
                                const DigestPolicy& policy, int threads);

/// Detectors without a PSF of their own take the median of the others' (source: neighbours).
void share_psf(ExposureDigest& digest);

/// Of the raw headers' cards keeps those of a coordinate system that can be used. One that cannot
/// (TNX, a damaged card) is dropped, and digest.header.notes says why: crosstalk needs no sky.
void keep_usable_wcs(const Camera& camera, ExposureDigest& digest);

/// Shift and rotation from the listed stars (header WCS first, if it already fits). Sets
/// digest.pointing and digest.transparency; states why where too few stars match.
void refine_pointing(const Camera& camera, const StarList* stars, ExposureDigest& digest);

}  // namespace straymark
