#include "night/mask_tables.h"

#include <cmath>
#include <limits>

#include "artifacts/artifact.h"

namespace straymark {
namespace {

const char* name_of(AssessmentState state) {
    switch (state) {
        case AssessmentState::off:
            return "off";
        case AssessmentState::assessed:
            return "assessed";
        case AssessmentState::partly:
            return "partly";
        case AssessmentState::unassessed:
            return "unassessed";
    }
    return "";
}

const char* name_of(AmplifierState state) {
    switch (state) {
        case AmplifierState::ok:
            return "ok";
        case AmplifierState::dead:
            return "dead";
        case AmplifierState::missing:
            return "missing";
        case AmplifierState::unusable:
            return "unusable";
    }
    return "";
}

const char* name_of(PsfSource source) {
    switch (source) {
        case PsfSource::none:
            return "none";
        case PsfSource::measured:
            return "measured";
        case PsfSource::neighbours:
            return "neighbours";
    }
    return "";
}

void set_bounds(const PixelBox& box, MarkRow& row) {
    row.x1 = box.x0 + 1;
    row.x2 = box.x1;
    row.y1 = box.y0 + 1;
    row.y2 = box.y1;
}

PixelBox bounds_of(const Mark& mark) {
    PixelBox box = mark.signal ? mark.signal->bounds() : PixelBox{};
    for (const ErrorMode& mode : mark.errors) {
        box = mode.shape ? box.united(mode.shape->bounds()) : box;
    }
    return box;
}

MarkRow row_of(const Mark& mark, const MarkOutcome& outcome) {
    MarkRow row;
    row.cause = mark.cause.text;
    row.source = mark.cause.source;
    row.source_x = mark.cause.source_x_px + 1.0;
    row.source_y = mark.cause.source_y_px + 1.0;
    row.shape = "pixels";
    row.status = mark.measured ? "measured" : "unmeasured";
    row.x = outcome.peak.x + 1;
    row.y = outcome.peak.y + 1;
    set_bounds(bounds_of(mark), row);
    row.strength_e = mark.strength_e;
    row.error_e = mark.strength_error_e;
    row.peak_e = outcome.peak_e;
    row.peak_error_e = outcome.peak_error_e;
    row.response = outcome.response;
    row.response_error = outcome.response_error;
    row.significance = mark.strength_error_e > 0.0
                           ? std::abs(mark.strength_e) / mark.strength_error_e
                           : std::numeric_limits<double>::infinity();
    row.area_px = outcome.area_px;
    return row;
}

/// Rows that stand for no single place.
MarkRow row_without_place(const PixelBox& box) {
    constexpr double kNone = std::numeric_limits<double>::quiet_NaN();
    MarkRow row;
    row.source_x = row.source_y = row.x = row.y = kNone;
    row.peak_e = row.peak_error_e = row.response = row.response_error = row.significance = kNone;
    set_bounds(box, row);
    return row;
}

void append_marks(const Artifact& artifact, const Detector& detector, double threshold,
                  const DetectorMarks& marks, const ArtifactOutcome& outcome,
                  std::vector<MarkRow>& rows) {
    const auto append = [&](MarkRow row) {
        row.kind = artifact.name;
        row.detector = detector.id;
        row.calibration = marks.assessment.calibration;
        rows.push_back(std::move(row));
    };
    const PixelBox whole{0, 0, detector.width, detector.height};
    MarkRow faint = row_without_place(whole);
    faint.cause = "many faint";
    faint.shape = "sum";
    faint.status = "measured";
    faint.count = marks.faint ? marks.faint->count() : 0;
    double variance = 0.0;
    for (std::size_t i = 0; i < outcome.marks.size(); ++i) {
        const Mark& mark = marks.marks[i];
        const MarkOutcome& judged = outcome.marks[i];
        const double reach =
            std::abs(judged.response) + (mark.measured ? 0.0 : 2.0 * judged.response_error);
        if (reach >= 0.25 * threshold) {
            append(row_of(mark, judged));
        } else {
            ++faint.count;
            faint.strength_e += mark.strength_e;
            variance += mark.strength_error_e * mark.strength_error_e;
        }
    }
    if (faint.count > 0) {
        faint.error_e = std::sqrt(variance);
        append(std::move(faint));
    }
    for (const UnassessedRegion& region : marks.regions) {
        MarkRow row = row_without_place(region.box);
        row.cause = region.reason;
        row.shape = "region";
        row.status = "unassessed";
        append(std::move(row));
    }
}

void append_detection(const Detector& detector, const DetectorDigest& digest,
                      std::vector<DetectionRow>& rows) {
    for (std::size_t a = 0; a < detector.amplifiers.size(); ++a) {
        const Amplifier& amplifier = detector.amplifiers[a];
        DetectionRow row;
        row.detector = detector.id;
        row.amplifier = amplifier.id;
        row.gain = amplifier.gain_e_per_adu;
        row.psf_source = name_of(digest.psf.source);
        row.psf_stars = digest.psf.stars;
        row.fwhm_px = digest.psf.fwhm_px;
        row.noise_equivalent_area_px = digest.psf.noise_equivalent_area_px;
        if (a < digest.amplifiers.size()) {
            const AmplifierDigest& measured = digest.amplifiers[a];
            row.state = name_of(measured.state);
            row.reason = measured.reason;
            row.noise_e = measured.noise_adu * row.gain;
            row.sky_e = measured.sky_adu * row.gain;
            row.floor_e = measured.floor_adu * row.gain;
        } else {
            row.state = name_of(AmplifierState::missing);
            row.reason = digest.reason;
        }
        rows.push_back(std::move(row));
    }
}

}  // namespace

void append_rows(const Site& site, int detector, const DetectorDigest& digest,
                 const std::array<DetectorMarks, kArtifactKinds>& marks, const DetectorMask& mask,
                 MaskFileTables& tables) {
    const Detector& described = site.camera.detectors[static_cast<std::size_t>(detector)];
    const double pixels = static_cast<double>(described.width) * described.height;
    for (const Artifact& artifact : registry()) {
        const auto kind = static_cast<std::size_t>(artifact.kind);
        const ArtifactOutcome& outcome = mask.outcome[kind];
        append_marks(artifact, described, site.decision.threshold[kind], marks[kind], outcome,
                     tables.marks);
        const Assessment& assessment = marks[kind].assessment;
        tables.assessed.push_back(
            {described.id, artifact.name, name_of(assessment.state), assessment.reason,
             assessment.calibration, static_cast<double>(outcome.flagged_px) / pixels,
             static_cast<double>(outcome.marginal_px) / pixels,
             static_cast<double>(outcome.unassessed_px) / pixels, assessment.truncation_response});
    }
    append_detection(described, digest, tables.detection);
    const Psf& psf = digest.psf;
    tables.psfs.push_back({described.id, name_of(psf.source), psf.stars, psf.fwhm_px,
                           psf.noise_equivalent_area_px, psf.radius, psf.values});
}

}  // namespace straymark
