#pragma once

#include <algorithm>

namespace straymark {

/// Half-open rectangle of pixels, 0-based: x0 <= x < x1, y0 <= y < y1.
struct PixelBox {
    int x0 = 0;
    int y0 = 0;
    int x1 = 0;
    int y1 = 0;

    [[nodiscard]] int width() const { return x1 - x0; }
    [[nodiscard]] int height() const { return y1 - y0; }
    [[nodiscard]] bool empty() const { return x1 <= x0 || y1 <= y0; }
    [[nodiscard]] bool contains(int x, int y) const {
        return x >= x0 && x < x1 && y >= y0 && y < y1;
    }
    [[nodiscard]] PixelBox intersected(const PixelBox& other) const {
        return {std::max(x0, other.x0), std::max(y0, other.y0), std::min(x1, other.x1),
                std::min(y1, other.y1)};
    }
    /// The smallest box that holds both; an empty box adds nothing.
    [[nodiscard]] PixelBox united(const PixelBox& other) const {
        if (empty()) {
            return other;
        }
        if (other.empty()) {
            return *this;
        }
        return {std::min(x0, other.x0), std::min(y0, other.y0), std::max(x1, other.x1),
                std::max(y1, other.y1)};
    }
    [[nodiscard]] PixelBox grown(int margin) const {
        return {x0 - margin, y0 - margin, x1 + margin, y1 + margin};
    }
    friend bool operator==(const PixelBox&, const PixelBox&) = default;
};

/// `length` pixels of row y, from x0.
struct PixelRun {
    int y = 0;
    int x0 = 0;
    int length = 0;
    friend bool operator==(const PixelRun&, const PixelRun&) = default;
};

}  // namespace straymark
