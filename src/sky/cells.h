#pragma once

#include <cstdint>
#include <vector>

#include "core/frames.h"

namespace straymark {

/// The sky cut into cells of nearly equal area: zones of equal height in declination, each cut in
/// right ascension into as many equal parts as make them about as wide as high. Cells are numbered
/// from the south pole, along each zone eastwards from RA 0.
class SkyCells {
public:
    /// size_deg: height of a zone; 180 / size_deg is rounded to a whole number. 0.05 or more.
    explicit SkyCells(double size_deg);

    [[nodiscard]] std::int32_t count() const { return first_.back(); }
    [[nodiscard]] std::int32_t cell(SkyPoint point) const;
    [[nodiscard]] SkyPoint centre(std::int32_t cell) const;
    [[nodiscard]] double zone_height_deg() const { return height_deg_; }

    /// Cells [first, end).
    struct Span {
        std::int32_t first = 0;
        std::int32_t end = 0;
    };
    /// Every cell that a disc touches lies in one of these spans (some that it does not touch do
    /// too). In ascending order, never overlapping.
    [[nodiscard]] std::vector<Span> touched(SkyPoint centre, double radius_deg) const;

private:
    [[nodiscard]] int zones() const { return static_cast<int>(first_.size()) - 1; }
    [[nodiscard]] int zone(double dec_deg) const;

    double height_deg_;
    std::vector<std::int32_t> first_;  ///< first cell of each zone; count at the end
};

}  // namespace straymark
