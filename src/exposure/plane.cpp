#include "exposure/plane.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>

namespace straymark {
namespace {

/// Edge of the blocks in which a transposed image is copied: two of them fit the first-level cache.
constexpr int kBlock = 32;

void copy_rows(const AmplifierFrame& frame, AmplifierPlane& plane) {
    for (int r = 0; r < plane.rows; ++r) {
        const float* source =
            frame.pixels.data() + file_index(frame, {plane.first_tick, plane.first_row + r});
        if (frame.tick_per_column > 0) {
            std::copy_n(source, plane.ticks, plane.row(r));
        } else {
            std::reverse_copy(source - plane.ticks + 1, source + 1, plane.row(r));
        }
    }
}

void copy_transposed(const AmplifierFrame& frame, AmplifierPlane& plane) {
    const std::ptrdiff_t step =
        static_cast<std::ptrdiff_t>(frame.width) * (frame.tick_per_row > 0 ? 1 : -1);
    for (int r0 = 0; r0 < plane.rows; r0 += kBlock) {
        for (int t0 = 0; t0 < plane.ticks; t0 += kBlock) {
            const int t1 = std::min(t0 + kBlock, plane.ticks);
            for (int r = r0; r < std::min(r0 + kBlock, plane.rows); ++r) {
                std::ptrdiff_t index =
                    file_index(frame, {plane.first_tick + t0, plane.first_row + r});
                float* target = plane.row(r);
                for (int t = t0; t < t1; ++t, index += step) {
                    target[t] = frame.pixels[static_cast<std::size_t>(index)];
                }
            }
        }
    }
}

}  // namespace

PixelBox readout_box(const AmplifierFrame& frame, const PixelBox& file_box) {
    const ReadoutIndex a = frame.readout_from_file(file_box.x0, file_box.y0);
    const ReadoutIndex b = frame.readout_from_file(file_box.x1 - 1, file_box.y1 - 1);
    return {std::min(a.tick, b.tick), std::min(a.row, b.row), std::max(a.tick, b.tick) + 1,
            std::max(a.row, b.row) + 1};
}

std::ptrdiff_t file_index(const AmplifierFrame& frame, ReadoutIndex index) {
    // The map is a signed permutation, so its transpose is its inverse.
    const int dt = index.tick - frame.origin.tick;
    const int dr = index.row - frame.origin.row;
    const int i = frame.data.x0 + dt * frame.tick_per_column + dr * frame.row_per_column;
    const int j = frame.data.y0 + dt * frame.tick_per_row + dr * frame.row_per_row;
    return static_cast<std::ptrdiff_t>(j) * frame.width + i;
}

void load_plane(const AmplifierFrame& frame, AmplifierPlane& plane) {
    assert(!frame.data.empty());
    assert(frame.data.intersected({0, 0, frame.width, frame.height}) == frame.data);
    assert(frame.pixels.size() ==
           static_cast<std::size_t>(frame.width) * static_cast<std::size_t>(frame.height));
    const PixelBox box = readout_box(frame, frame.data);
    plane.first_tick = box.x0;
    plane.first_row = box.y0;
    plane.ticks = box.width();
    plane.rows = box.height();
    plane.values.resize(static_cast<std::size_t>(plane.ticks) *
                        static_cast<std::size_t>(plane.rows));
    if (frame.tick_per_column != 0) {
        copy_rows(frame, plane);
    } else {
        copy_transposed(frame, plane);
    }
    for (float& value : plane.values) {
        value = std::abs(value) <= std::numeric_limits<float>::max()
                    ? value
                    : std::numeric_limits<float>::quiet_NaN();
    }
}

}  // namespace straymark
