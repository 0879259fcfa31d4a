#include "io/raw_wcs.h"

#include <fmt/format.h>
#include <optional>

#include "core/frames.h"

namespace straymark::io {
namespace {

/// The detector's pixel at which the file's pixel `column`, `row` right of and above the first data
/// pixel lies.
DetectorPixel detector_pixel(const Amplifier& amplifier, const AmplifierPlacement& placement,
                             int column, int row) {
    return amplifier.readout.detector_from_readout(
        {placement.origin.tick + column * placement.tick_per_column + row * placement.tick_per_row,
         placement.origin.row + column * placement.row_per_column + row * placement.row_per_row});
}

/// Detector pixel minus file pixel, where both run the same way.
std::optional<DetectorPixel> shift_of(const Amplifier& amplifier,
                                      const AmplifierPlacement& placement) {
    const DetectorPixel first = detector_pixel(amplifier, placement, 0, 0);
    const DetectorPixel right = detector_pixel(amplifier, placement, 1, 0);
    const DetectorPixel above = detector_pixel(amplifier, placement, 0, 1);
    if (right != DetectorPixel{first.x + 1, first.y} ||
        above != DetectorPixel{first.x, first.y + 1}) {
        return std::nullopt;
    }
    return DetectorPixel{first.x - placement.data.x0, first.y - placement.data.y0};
}

std::vector<std::string> shifted_cards(const FitsHeader& header, DetectorPixel shift) {
    const std::optional<CardValue> x_value = header.find("CRPIX1");
    const std::optional<CardValue> y_value = header.find("CRPIX2");
    const std::optional<double> x = x_value ? x_value->number() : std::nullopt;
    const std::optional<double> y = y_value ? y_value->number() : std::nullopt;
    if (!x || !y) {
        return {};
    }
    std::vector<std::string> cards;
    for (std::size_t i = 0; i < header.size(); ++i) {
        const std::string_view keyword = header.card(i).substr(0, 8);
        if (keyword != "CRPIX1  " && keyword != "CRPIX2  ") {
            cards.emplace_back(header.card(i));
        }
    }
    const auto card = [](const char* keyword, double value) {
        return fmt::format("{:<80}", fmt::format("{:<8}= {:>20.15G}", keyword, value));
    };
    cards.push_back(card("CRPIX1", *x + shift.x));
    cards.push_back(card("CRPIX2", *y + shift.y));
    return cards;
}

}  // namespace

std::vector<std::string> detector_wcs_cards(const Detector& detector,
                                            const DetectorPlacement& placement,
                                            const InputFile& file, const FitsStructure& structure) {
    for (std::size_t i = 0; i < placement.amplifiers.size(); ++i) {
        if (!placement.amplifiers[i]) {
            continue;
        }
        const AmplifierPlacement& amplifier = *placement.amplifiers[i];
        if (const std::optional<DetectorPixel> shift =
                shift_of(detector.amplifiers[i], amplifier)) {
            const FitsHdu& hdu = structure.hdus[static_cast<std::size_t>(amplifier.hdu)];
            return shifted_cards(read_header(file, hdu), *shift);
        }
    }
    return {};
}

}  // namespace straymark::io
