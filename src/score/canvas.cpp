#include "score/canvas.h"

#include <cstddef>

#include "score/font.h"

namespace straymark::score {
namespace {

constexpr int kAdvance = kGlyphWidth + 1;

char raised(char character) {
    return character >= 'a' && character <= 'z' ? static_cast<char>(character - 'a' + 'A')
                                                : character;
}

}  // namespace

Canvas::Canvas(int width, int height, Colour background)
    : width_(width),
      height_(height),
      rgb_(std::size_t{3} * static_cast<std::size_t>(width) * static_cast<std::size_t>(height)) {
    fill({0, 0, width, height}, background);
}

void Canvas::set(int x, int y, Colour colour) {
    if (x < 0 || y < 0 || x >= width_ || y >= height_) {
        return;
    }
    const std::size_t at = 3 * (static_cast<std::size_t>(y) * width_ + x);
    rgb_[at] = colour.red;
    rgb_[at + 1] = colour.green;
    rgb_[at + 2] = colour.blue;
}

void Canvas::fill(const PixelBox& box, Colour colour) {
    const PixelBox inside = box.intersected({0, 0, width_, height_});
    for (int y = inside.y0; y < inside.y1; ++y) {
        for (int x = inside.x0; x < inside.x1; ++x) {
            set(x, y, colour);
        }
    }
}

void Canvas::text(int x, int y, std::string_view line, Colour colour, int scale) {
    for (const char character : line) {
        glyph(x, y, raised(character), colour, scale);
        x += kAdvance * scale;
    }
}

int Canvas::text_width(std::size_t characters, int scale) {
    return static_cast<int>(characters) * kAdvance * scale;
}

void Canvas::glyph(int x, int y, char character, Colour colour, int scale) {
    const GlyphRows& rows = glyph_rows(character);
    for (int row = 0; row < kTextHeight; ++row) {
        for (int dot = 0; dot < kGlyphWidth; ++dot) {
            if (((rows[static_cast<std::size_t>(row)] >> (kGlyphWidth - 1 - dot)) & 1) != 0) {
                const int left = x + dot * scale;
                const int top = y + row * scale;
                fill({left, top, left + scale, top + scale}, colour);
            }
        }
    }
}

}  // namespace straymark::score
