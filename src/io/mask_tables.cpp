#include "io/mask_tables.h"

#include <array>
#include <functional>
#include <string>
#include <type_traits>

#include "mask/bits.h"

namespace straymark::io {
namespace {

constexpr const char* kPixel = "pixel";
constexpr const char* kElectron = "electron";
constexpr std::array<const char*, kArtifactKinds> kThresholdColumns = {
    "threshold_crosstalk", "threshold_ghost", "threshold_spike",
    "threshold_persistence"};  // by ArtifactKind

/// One column from the same member, or function, of every row.
template <typename Rows, typename Get>
TableColumn column(const char* name, const char* unit, const Rows& rows, Get get) {
    using Cell = std::remove_cvref_t<decltype(std::invoke(get, *rows.begin()))>;
    std::vector<Cell> cells;
    cells.reserve(rows.size());
    for (const auto& row : rows) {
        cells.push_back(std::invoke(get, row));
    }
    return {name, unit, std::move(cells)};
}

FitsUnit bits_unit() {
    const auto& rows = kMaskBits;
    return table_unit(
        "BITS",
        {column("bit", "", rows,
                [](const MaskBitEntry& row) { return static_cast<std::int16_t>(row.bit); }),
         column("value", "", rows, [](const MaskBitEntry& row) { return value_of(row.bit); }),
         column("name", "", rows, [](const MaskBitEntry& row) { return std::string(row.name); }),
         column("meaning", "", rows,
                [](const MaskBitEntry& row) { return std::string(row.meaning); }),
         column("mask_by_default", "", rows, &MaskBitEntry::mask_by_default)});
}

FitsUnit marks_unit(const std::vector<MarkRow>& rows) {
    return table_unit("MARKS", {column("kind", "", rows, &MarkRow::kind),
                                column("detector", "", rows, &MarkRow::detector),
                                column("cause", "", rows, &MarkRow::cause),
                                column("source", "", rows, &MarkRow::source),
                                column("source_x", kPixel, rows, &MarkRow::source_x),
                                column("source_y", kPixel, rows, &MarkRow::source_y),
                                column("shape", "", rows, &MarkRow::shape),
                                column("x", kPixel, rows, &MarkRow::x),
                                column("y", kPixel, rows, &MarkRow::y),
                                column("x1", kPixel, rows, &MarkRow::x1),
                                column("x2", kPixel, rows, &MarkRow::x2),
                                column("y1", kPixel, rows, &MarkRow::y1),
                                column("y2", kPixel, rows, &MarkRow::y2),
                                column("strength_e", kElectron, rows, &MarkRow::strength_e),
                                column("error_e", kElectron, rows, &MarkRow::error_e),
                                column("peak_e", kElectron, rows, &MarkRow::peak_e),
                                column("peak_error_e", kElectron, rows, &MarkRow::peak_error_e),
                                column("response", "", rows, &MarkRow::response),
                                column("response_error", "", rows, &MarkRow::response_error),
                                column("significance", "", rows, &MarkRow::significance),
                                column("area_px", kPixel, rows, &MarkRow::area_px),
                                column("count", "", rows, &MarkRow::count),
                                column("status", "", rows, &MarkRow::status),
                                column("calibration", "", rows, &MarkRow::calibration)});
}

/// The same value in every row: each row can be read alone.
template <typename T>
TableColumn constant(const std::string& name, const char* unit, std::size_t rows, T value) {
    return {name, unit, std::vector<T>(rows, value)};
}

FitsUnit detection_unit(const std::vector<DetectionRow>& rows, const DecisionSettings& settings) {
    std::vector<TableColumn> columns = {
        column("detector", "", rows, &DetectionRow::detector),
        column("amplifier", "", rows, &DetectionRow::amplifier),
        column("state", "", rows, &DetectionRow::state),
        column("reason", "", rows, &DetectionRow::reason),
        column("noise_e", kElectron, rows, &DetectionRow::noise_e),
        column("sky_e", kElectron, rows, &DetectionRow::sky_e),
        column("gain", "electron/adu", rows, &DetectionRow::gain),
        column("psf_source", "", rows, &DetectionRow::psf_source),
        column("psf_stars", "", rows, &DetectionRow::psf_stars),
        column("fwhm_px", kPixel, rows, &DetectionRow::fwhm_px),
        column("noise_equivalent_area_px", kPixel, rows, &DetectionRow::noise_equivalent_area_px),
        column("floor_e", kElectron, rows, &DetectionRow::floor_e),
        constant("background_px", kPixel, rows.size(), std::int32_t{settings.background_px}),
        constant("template_noise", "", rows.size(), settings.template_noise)};
    for (std::size_t kind = 0; kind < kThresholdColumns.size(); ++kind) {
        columns.push_back(
            constant(kThresholdColumns[kind], "", rows.size(), settings.threshold[kind]));
    }
    return table_unit("DETECTION", columns);
}

FitsUnit psf_unit(const std::vector<PsfRow>& rows) {
    return table_unit(
        "PSF",
        {column("detector", "", rows, &PsfRow::detector),
         column("source", "", rows, &PsfRow::source), column("stars", "", rows, &PsfRow::stars),
         column("fwhm_px", kPixel, rows, &PsfRow::fwhm_px),
         column("noise_equivalent_area_px", kPixel, rows, &PsfRow::noise_equivalent_area_px),
         column("radius_px", kPixel, rows, &PsfRow::radius_px),
         column("values", "", rows, &PsfRow::values)});
}

FitsUnit assessed_unit(const std::vector<AssessedRow>& rows) {
    return table_unit("ASSESSED",
                      {column("detector", "", rows, &AssessedRow::detector),
                       column("predictor", "", rows, &AssessedRow::predictor),
                       column("state", "", rows, &AssessedRow::state),
                       column("reason", "", rows, &AssessedRow::reason),
                       column("calibration", "", rows, &AssessedRow::calibration),
                       column("flagged_fraction", "", rows, &AssessedRow::flagged_fraction),
                       column("marginal_fraction", "", rows, &AssessedRow::marginal_fraction),
                       column("unassessed_fraction", "", rows, &AssessedRow::unassessed_fraction),
                       column("truncation_response", "", rows, &AssessedRow::truncation_response)});
}

}  // namespace

std::vector<FitsUnit> mask_table_units(const MaskFileTables& tables) {
    std::vector<FitsUnit> units;
    units.push_back(bits_unit());
    units.push_back(marks_unit(tables.marks));
    units.push_back(detection_unit(tables.detection, tables.settings));
    units.push_back(psf_unit(tables.psfs));
    units.push_back(assessed_unit(tables.assessed));
    return units;
}

}  // namespace straymark::io
