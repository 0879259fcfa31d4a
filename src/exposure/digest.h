#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "core/frames.h"
#include "core/pixel_box.h"
#include "exposure/header.h"
#include "sky/wcs.h"

/// What is kept of an exposure once its pixels are gone. Predictors read only this, so a digest
/// must hold everything that decides a bit: masks made from digests equal masks made from pixels.

namespace straymark {

/// `length` pixels in clock order, from `tick` of `row`; values at `first_value` of the amplifier.
struct ReadoutRun {
    std::int32_t row = 0;
    std::int32_t tick = 0;
    std::int32_t length = 0;
    std::uint32_t first_value = 0;
    friend bool operator==(const ReadoutRun&, const ReadoutRun&) = default;
};

/// Pixels without values, in clock order.
struct ReadoutSpan {
    std::int32_t row = 0;
    std::int32_t tick = 0;
    std::int32_t length = 0;
    friend bool operator==(const ReadoutSpan&, const ReadoutSpan&) = default;
};

/// Why an amplifier's pixels say nothing. `ok`: they do.
enum class AmplifierState : std::uint8_t {
    ok,
    dead,      ///< the camera file says so: neither source nor victim
    missing,   ///< no pixels in the files handed over
    unusable,  ///< pixels, but constant, all saturated or without a value
};

/// One amplifier. ADU are raw ADU: before gain, linearity and flat.
struct AmplifierDigest {
    AmplifierState state = AmplifierState::missing;
    std::string reason;            ///< why not ok
    double bias_adu = 0.0;         ///< mean level removed
    double sky_adu = 0.0;          ///< sky pedestal above bias (mean)
    double noise_adu = 0.0;        ///< robust noise of the sky (sky and read noise, no stars)
    double floor_adu = 0.0;        ///< every pixel this far above the sky, or farther, is in `runs`
    std::vector<ReadoutRun> runs;  ///< by row, then tick; never touching each other
    std::vector<float> values;     ///< ADU above the local sky pedestal
    std::vector<ReadoutSpan> saturated;  ///< raw >= saturation; each lies within one run
    std::vector<ReadoutSpan> invalid;    ///< NaN or blank pixels: their signal is not known
};

enum class PsfSource : std::uint8_t { none, measured, neighbours };

/// Point-spread function of a detector: pixel values on a (2 radius + 1)^2 grid about its centre,
/// row-major, sum 1, as measured from stars (core) continued by a fitted profile (wings).
struct Psf {
    PsfSource source = PsfSource::none;
    int radius = 0;
    std::vector<float> values;
    double fwhm_px = 0.0;
    double noise_equivalent_area_px = 0.0;  ///< 1 / sum(P^2), King 1983, PASP 95, 163
    int stars = 0;                          ///< that it was measured from
};

/// A star measured on the pixels, unsaturated.
struct MeasuredStar {
    DetectorPoint position;
    float flux_e = 0.0F;
    float flux_error_e = 0.0F;
    float position_error_px = 0.0F;
};

struct DetectorDigest {
    bool present = false;  ///< pixels of at least one amplifier were handed over
    std::string reason;    ///< why not
    std::string raw_file;  ///< base name of the file that holds it
    Psf psf;
    std::vector<AmplifierDigest> amplifiers;  ///< in the camera's order
    std::vector<PixelRun>
        bleed;  ///< charge spilled along columns from a saturated core, detector pixels
    std::vector<MeasuredStar> stars;      ///< brightest first
    std::vector<std::string> header_wcs;  ///< cards of the raw header's WCS; none: not usable
};

struct ExposureDigest {
    ExposureHeader header;
    std::string camera_digest;
    std::vector<std::string> input_digests;  ///< "NAME DIGEST" of each raw file
    Pointing pointing;
    double transparency = 1.0;  ///< measured star flux over listed, robust; 1 if not measured
    std::vector<DetectorDigest> detectors;  ///< in the camera's order
};

}  // namespace straymark
