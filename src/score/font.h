#pragma once

#include <array>
#include <cstdint>

namespace straymark::score {

/// Seven rows of five dots, from the top; bit 4 is the left one.
using GlyphRows = std::array<std::uint8_t, 7>;

/// Capitals, digits and a few signs; an empty box for anything else.
const GlyphRows& glyph_rows(char character);

inline constexpr int kGlyphWidth = 5;

}  // namespace straymark::score
