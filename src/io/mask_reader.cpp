#include "io/mask_reader.h"

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <fmt/format.h>
#include <limits>
#include <utility>

#include "core/error.h"

namespace straymark::io {
namespace {

/// One table of a mask file: fills a member of every row from the column of one name.
template <typename Row>
class TableRows {
public:
    TableRows(const CheckedFits& file, const std::string& table)
        : file_(file),
          part_(file.required(table)),
          table_(table),
          rows_(static_cast<std::size_t>(file.parts()[static_cast<std::size_t>(part_)].rows)) {}

    TableRows& fill(const std::string& name, std::string Row::*member) {
        std::vector<std::string> cells = file_.text_column(part_, name);
        for (std::size_t i = 0; i < rows_.size(); ++i) {
            rows_[i].*member = std::move(cells[i]);
        }
        return *this;
    }
    TableRows& fill(const std::string& name, double Row::*member, bool allow_nan = false) {
        const std::vector<double> cells = file_.number_column(part_, name, allow_nan);
        for (std::size_t i = 0; i < rows_.size(); ++i) {
            rows_[i].*member = cells[i];
        }
        return *this;
    }
    template <typename Integer>
    TableRows& fill(const std::string& name, Integer Row::*member) {
        const std::vector<double> cells = file_.number_column(part_, name);
        for (std::size_t i = 0; i < rows_.size(); ++i) {
            rows_[i].*member = static_cast<Integer>(
                whole(cells[i], static_cast<double>(std::numeric_limits<Integer>::max()), name, i));
        }
        return *this;
    }
    TableRows& fill(const std::string& name, std::vector<float> Row::*member) {
        std::vector<std::vector<float>> cells = file_.array_column(part_, name);
        for (std::size_t i = 0; i < rows_.size(); ++i) {
            rows_[i].*member = std::move(cells[i]);
        }
        return *this;
    }
    std::vector<Row> take() { return std::move(rows_); }

private:
    /// Numbers are read as doubles, which are exact up to 2^53.
    [[nodiscard]] double whole(double cell, double largest, const std::string& name,
                               std::size_t row) const {
        constexpr double kExact = 9007199254740992.0;
        if (std::abs(cell) > std::min(largest, kExact) || cell != std::floor(cell)) {
            file_.refuse(fmt::format("{}, row {}, column {}", table_, row + 1, name),
                         fmt::format("{}", cell), "a whole number", "make the mask again");
        }
        return cell;
    }

    const CheckedFits& file_;
    int part_;
    std::string table_;
    std::vector<Row> rows_;
};

struct BitRow {
    std::string name;
    std::int32_t value = 0;
};
struct BackgroundRow {
    std::int32_t background_px = 0;
};

}  // namespace

MaskFile::MaskFile(const std::string& path) : file_(path, CheckedFits::Sums::required) {
    const std::optional<std::string> id = file_.primary_text("OBS_ID");
    if (!id || !file_.find("BITS")) {
        file_.refuse("primary header", id ? "no BITS table" : "no OBS_ID", "a mask file",
                     "give a file that `straymark build` wrote");
    }
    exposure_ = *id;
    for (const FitsPart& part : file_.parts()) {
        if (part.is_image && part.width > 0) {
            images_.push_back({part.name, part.width, part.height});
        }
    }
}

std::optional<std::string> MaskFile::card(const std::string& keyword) const {
    return file_.primary_text(keyword);
}

std::vector<MaskPixel> MaskFile::bits(const std::string& detector) const {
    return file_.int16_image(file_.required(detector));
}

std::map<std::string, std::int32_t> MaskFile::bit_values() const {
    std::map<std::string, std::int32_t> values;
    for (const BitRow& row : TableRows<BitRow>(file_, "BITS")
                                 .fill("name", &BitRow::name)
                                 .fill("value", &BitRow::value)
                                 .take()) {
        values[row.name] = row.value;
    }
    return values;
}

std::vector<MarkRow> MaskFile::marks() const {
    return TableRows<MarkRow>(file_, "MARKS")
        .fill("kind", &MarkRow::kind)
        .fill("detector", &MarkRow::detector)
        .fill("cause", &MarkRow::cause)
        .fill("source", &MarkRow::source)
        .fill("source_x", &MarkRow::source_x, true)
        .fill("source_y", &MarkRow::source_y, true)
        .fill("shape", &MarkRow::shape)
        .fill("calibration", &MarkRow::calibration)
        .fill("status", &MarkRow::status)
        .fill("x", &MarkRow::x)
        .fill("y", &MarkRow::y)
        .fill("x1", &MarkRow::x1)
        .fill("x2", &MarkRow::x2)
        .fill("y1", &MarkRow::y1)
        .fill("y2", &MarkRow::y2)
        .fill("strength_e", &MarkRow::strength_e)
        .fill("error_e", &MarkRow::error_e)
        .fill("peak_e", &MarkRow::peak_e, true)
        .fill("peak_e", &MarkRow::peak_e)
        .fill("response", &MarkRow::response)
        .fill("response_error", &MarkRow::response_error)
        .fill("significance", &MarkRow::significance, true)
        .fill("area_px", &MarkRow::area_px)
        .fill("count", &MarkRow::count)
        .take();
}

std::vector<DetectionRow> MaskFile::detection() const {
    return TableRows<DetectionRow>(file_, "DETECTION")
        .fill("detector", &DetectionRow::detector)
        .fill("amplifier", &DetectionRow::amplifier)
        .fill("state", &DetectionRow::state)
        .fill("reason", &DetectionRow::reason)
        .fill("psf_source", &DetectionRow::psf_source)
        .fill("noise_e", &DetectionRow::noise_e, true)
        .fill("sky_e", &DetectionRow::sky_e, true)
        .fill("gain", &DetectionRow::gain, true)
        .fill("fwhm_px", &DetectionRow::fwhm_px, true)
        .fill("noise_equivalent_area_px", &DetectionRow::noise_equivalent_area_px, true)
        .fill("floor_e", &DetectionRow::floor_e, true)
        .fill("psf_stars", &DetectionRow::psf_stars)
        .take();
}

std::vector<AssessedRow> MaskFile::assessed() const {
    return TableRows<AssessedRow>(file_, "ASSESSED")
        .fill("detector", &AssessedRow::detector)
        .fill("predictor", &AssessedRow::predictor)
        .fill("state", &AssessedRow::state)
        .fill("reason", &AssessedRow::reason)
        .fill("calibration", &AssessedRow::calibration)
        .fill("flagged_fraction", &AssessedRow::flagged_fraction)
        .fill("marginal_fraction", &AssessedRow::marginal_fraction)
        .fill("unassessed_fraction", &AssessedRow::unassessed_fraction)
        .fill("truncation_response", &AssessedRow::truncation_response, true)
        .take();
}

std::optional<int> MaskFile::background_px() const {
    const std::vector<BackgroundRow> rows =
        TableRows<BackgroundRow>(file_, "DETECTION")
            .fill("background_px", &BackgroundRow::background_px)
            .take();
    if (rows.empty()) {
        return std::nullopt;
    }
    return rows.front().background_px;
}

}  // namespace straymark::io
