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
        : table_(file.table(table)), rows_(table_.rows()) {}

    TableRows& fill(const std::string& name, std::string Row::*member) {
        std::vector<std::string> cells = table_.strings(name);
        for (std::size_t i = 0; i < rows_.size(); ++i) {
            rows_[i].*member = std::move(cells[i]);
        }
        return *this;
    }
    TableRows& fill(const std::string& name, double Row::*member,
                    NotANumber nan = NotANumber::refused) {
        const std::vector<double> cells = number_column(table_, name, nan);
        for (std::size_t i = 0; i < rows_.size(); ++i) {
            rows_[i].*member = cells[i];
        }
        return *this;
    }
    template <typename Integer>
    TableRows& fill(const std::string& name, Integer Row::*member) {
        const std::vector<double> cells = number_column(table_, name);
        for (std::size_t i = 0; i < rows_.size(); ++i) {
            rows_[i].*member = static_cast<Integer>(
                whole(cells[i], static_cast<double>(std::numeric_limits<Integer>::max()), name, i));
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
            table_.refuse(fmt::format("row {}, column {}", row + 1, name), fmt::format("{}", cell),
                          "a whole number", "make the mask again");
        }
        return cell;
    }

    BinaryTable table_;
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

MaskFile::MaskFile(const std::string& path) : file_(path) {
    const std::optional<std::string> id = file_.primary_text("OBS_ID");
    if (!id || file_.find("BITS") == nullptr) {
        file_.refuse("primary header", id ? "no BITS table" : "no OBS_ID", "a mask file",
                     "give a file that `straymark build` wrote");
    }
    exposure_ = *id;
    for (const FitsHdu& unit : file_.units()) {
        if (const std::optional<ImageSize> size = image_size(unit)) {
            images_.push_back({unit.name, size->width, size->height});
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
        .fill("source_x", &MarkRow::source_x, NotANumber::allowed)
        .fill("source_y", &MarkRow::source_y, NotANumber::allowed)
        .fill("shape", &MarkRow::shape)
        .fill("calibration", &MarkRow::calibration)
        .fill("status", &MarkRow::status)
        .fill("x", &MarkRow::x, NotANumber::allowed)
        .fill("y", &MarkRow::y, NotANumber::allowed)
        .fill("x1", &MarkRow::x1)
        .fill("x2", &MarkRow::x2)
        .fill("y1", &MarkRow::y1)
        .fill("y2", &MarkRow::y2)
        .fill("strength_e", &MarkRow::strength_e, NotANumber::allowed)
        .fill("error_e", &MarkRow::error_e, NotANumber::allowed)
        .fill("peak_e", &MarkRow::peak_e, NotANumber::allowed)
        .fill("peak_error_e", &MarkRow::peak_error_e, NotANumber::allowed)
        .fill("response", &MarkRow::response, NotANumber::allowed)
        .fill("response_error", &MarkRow::response_error, NotANumber::allowed)
        .fill("significance", &MarkRow::significance, NotANumber::allowed)
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
        .fill("noise_e", &DetectionRow::noise_e, NotANumber::allowed)
        .fill("sky_e", &DetectionRow::sky_e, NotANumber::allowed)
        .fill("gain", &DetectionRow::gain, NotANumber::allowed)
        .fill("fwhm_px", &DetectionRow::fwhm_px, NotANumber::allowed)
        .fill("noise_equivalent_area_px", &DetectionRow::noise_equivalent_area_px,
              NotANumber::allowed)
        .fill("floor_e", &DetectionRow::floor_e, NotANumber::allowed)
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
        .fill("truncation_response", &AssessedRow::truncation_response, NotANumber::allowed)
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
