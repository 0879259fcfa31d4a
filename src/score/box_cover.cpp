#include "score/box_cover.h"

#include <cstddef>

namespace straymark::score {

BoxCover::BoxCover(int width, int height, std::span<const PixelBox> boxes)
    : width_(static_cast<std::size_t>(width)),
      covered_(static_cast<std::size_t>(width) * static_cast<std::size_t>(height)) {
    // Corners of the boxes, summed over both axes, count the boxes over each pixel.
    const std::size_t stride = width_ + 1;
    std::vector<std::int32_t> count(stride * (static_cast<std::size_t>(height) + 1));
    for (const PixelBox& given : boxes) {
        const PixelBox box = given.intersected({0, 0, width, height});
        if (box.empty()) {
            continue;
        }
        ++count[std::size_t(box.y0) * stride + box.x0];
        --count[std::size_t(box.y0) * stride + box.x1];
        --count[std::size_t(box.y1) * stride + box.x0];
        ++count[std::size_t(box.y1) * stride + box.x1];
    }
    std::vector<std::int32_t> column(stride);
    for (std::size_t y = 0; y < std::size_t(height); ++y) {
        std::int32_t here = 0;
        for (std::size_t x = 0; x < width_; ++x) {
            column[x] += count[y * stride + x];
            here += column[x];
            covered_[y * width_ + x] = here > 0 ? 1 : 0;
        }
    }
}

}  // namespace straymark::score
