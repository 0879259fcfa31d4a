#pragma once

#include <cstdint>
#include <span>
#include <string_view>
#include <vector>

#include "core/pixel_box.h"

namespace straymark::score {

struct Colour {
    std::uint8_t red = 0;
    std::uint8_t green = 0;
    std::uint8_t blue = 0;
};

/// A small picture to draw into; (0, 0) is the top left. What falls outside is not drawn.
class Canvas {
public:
    Canvas(int width, int height, Colour background);

    [[nodiscard]] int width() const { return width_; }
    [[nodiscard]] int height() const { return height_; }
    /// 3 bytes a pixel, row by row from the top.
    [[nodiscard]] std::span<const std::uint8_t> rgb() const { return rgb_; }

    void set(int x, int y, Colour colour);
    void fill(const PixelBox& box, Colour colour);
    /// One line of text, its top left corner at (x, y); capitals only (others are raised), and an
    /// empty box for what the font lacks. `scale`: pixels for each dot of the font.
    void text(int x, int y, std::string_view line, Colour colour, int scale = 1);
    /// Width of a line of `characters`, pixels.
    static int text_width(std::size_t characters, int scale = 1);
    static constexpr int kTextHeight = 7;  ///< at scale 1

private:
    void glyph(int x, int y, char character, Colour colour, int scale);

    int width_, height_;
    std::vector<std::uint8_t> rgb_;
};

}  // namespace straymark::score
