#pragma once

#include <optional>
#include <string>
#include <string_view>

#include "core/pixel_box.h"

namespace straymark::io {

/// A section of an image as FITS headers write it, "[x1:x2,y1:y2]": 1-based, both ends included;
/// a first end above the second means that this axis runs backwards.
struct FitsSection {
    int x1 = 1, x2 = 1, y1 = 1, y2 = 1;

    /// The pixels it covers, 0-based, whichever way its axes run.
    [[nodiscard]] PixelBox box() const;
    [[nodiscard]] bool reversed_x() const { return x1 > x2; }
    [[nodiscard]] bool reversed_y() const { return y1 > y2; }
    friend bool operator==(const FitsSection&, const FitsSection&) = default;
};

/// Reads a section; blanks may stand anywhere between its parts. Nothing where the text is not a
/// section of two axes with ends from 1 to 1,000,000,000.
std::optional<FitsSection> parse_section(std::string_view text);
/// "[x1:x2,y1:y2]"
std::string to_string(const FitsSection& section);
std::string section_text(const PixelBox& box);

}  // namespace straymark::io
