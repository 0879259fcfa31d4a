#pragma once

#include <cstdint>
#include <span>
#include <vector>

#include "core/pixel_box.h"

namespace straymark::score {

/// Which pixels of a detector lie in any of a set of boxes. Its cost is the pixels' plus the boxes'
/// number, however large they are.
class BoxCover {
public:
    BoxCover(int width, int height, std::span<const PixelBox> boxes);
    [[nodiscard]] bool covers(int x, int y) const {
        return covered_[static_cast<std::size_t>(y) * width_ + x] != 0;
    }

private:
    std::size_t width_;
    std::vector<std::uint8_t> covered_;
};

}  // namespace straymark::score
