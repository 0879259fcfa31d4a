#pragma once

#include <memory>
#include <optional>
#include <string>
#include <utility>
#include <vector>

#include "mask/decide.h"

namespace straymark {

/// One row of the MARKS table. Positions are FITS pixels (1-based) here: this is what people read.
struct MarkRow {
    std::string kind, detector, cause, source, shape, calibration,
        status;                               ///< status: measured | unmeasured
    double source_x = 0.0, source_y = 0.0;    ///< NaN: none
    double x = 0.0, y = 0.0;                  ///< where the mark's own response is largest
    int x1 = 0, x2 = 0, y1 = 0, y2 = 0;       ///< bounding box, inclusive
    double strength_e = 0.0, error_e = 0.0;   ///< total, 1 sigma
    double peak_e = 0.0, peak_error_e = 0.0;  ///< largest per pixel, 1 sigma
    double response = 0.0, response_error = 0.0;
    double significance = 0.0;  ///< |strength| / error
    std::int64_t area_px = 0;
    std::int64_t count = 1;  ///< marks summed in this row ("many faint")
};

/// One row of the DETECTION table: what the decision rested on, for one amplifier.
struct DetectionRow {
    std::string detector, amplifier, state, reason, psf_source;
    double noise_e = 0.0, sky_e = 0.0, gain = 0.0, fwhm_px = 0.0, noise_equivalent_area_px = 0.0;
    double floor_e = 0.0;  ///< source pixels fainter than this are not in the digest
    int psf_stars = 0;
};

/// One row of the PSF table: the point-spread function that the responses on a detector rest on.
struct PsfRow {
    std::string detector, source;
    int stars = 0;
    double fwhm_px = 0.0, noise_equivalent_area_px = 0.0;
    int radius_px = 0;
    std::vector<float> values;  ///< as Psf::values
};

/// One row of the ASSESSED table.
struct AssessedRow {
    std::string detector, predictor, state, reason, calibration;
    double flagged_fraction = 0.0, marginal_fraction = 0.0, unassessed_fraction = 0.0;
    double truncation_response = 0.0;  ///< bound on the response of what was too faint to be summed
};

/// A card of the primary header: keyword (8 characters at most), value, comment.
struct MaskCard {
    std::string keyword, value, comment;
};

/// What a mask file came to, in its primary header: enough to report it again without its pixels.
/// Fractions of all pixels of the file's detectors.
struct MaskSummary {
    std::string build_key;  ///< fingerprint of all inputs
    double flagged_fraction = 0.0;
    double marginal_fraction = 0.0;
    double unassessed_fraction = 0.0;
};

/// All of a mask file but its images.
struct MaskFileTables {
    std::vector<MaskCard> primary;  ///< OBS_ID, RAWFILE, versions, digests
    MaskSummary summary;
    DecisionSettings settings;
    std::vector<MarkRow> marks;
    std::vector<DetectionRow> detection;
    std::vector<PsfRow> psfs;
    std::vector<AssessedRow> assessed;
};

/// Writes one mask file; nothing appears under its name before `finish` returns.
class MaskFileWriter {
public:
    virtual ~MaskFileWriter() = default;
    MaskFileWriter() = default;
    MaskFileWriter(const MaskFileWriter&) = delete;
    MaskFileWriter& operator=(const MaskFileWriter&) = delete;
    /// Encodes one image; `position` orders them in the file; thread-safe; keeps no reference.
    virtual void add(int position, const std::string& detector, const DetectorMask& mask,
                     const std::vector<std::string>& wcs_cards) = 0;
    virtual void finish(const MaskFileTables& tables) = 0;
};

}  // namespace straymark
