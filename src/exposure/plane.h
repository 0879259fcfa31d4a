#pragma once

#include <vector>

#include "exposure/frame.h"

namespace straymark {

/// The data pixels of one amplifier in the order in which they are clocked: value of tick t and row
/// r, both counted from the first data pixel, at r * ticks + t. All measurements are made on this,
/// so that they do not depend on how a file stores its pixels. Units: ADU. NaN: no value.
struct AmplifierPlane {
    int first_tick = 0;  ///< read-out index of values[0]
    int first_row = 0;
    int ticks = 0;
    int rows = 0;
    std::vector<float> values;

    [[nodiscard]] float* row(int r) {
        return values.data() + static_cast<std::ptrdiff_t>(r) * ticks;
    }
    [[nodiscard]] const float* row(int r) const {
        return values.data() + static_cast<std::ptrdiff_t>(r) * ticks;
    }
    [[nodiscard]] float at(int tick, int r) const { return row(r)[tick]; }
    [[nodiscard]] bool holds(int tick, int r) const {
        return tick >= 0 && tick < ticks && r >= 0 && r < rows;
    }
};

/// Copies the raw data pixels of `frame` into `plane` (its buffer is reused), in clock order;
/// infinities become NaN.
void load_plane(const AmplifierFrame& frame, AmplifierPlane& plane);

/// The ticks (x) and rows (y), in read-out indices, that a box of file pixels covers.
PixelBox readout_box(const AmplifierFrame& frame, const PixelBox& file_box);

/// Index into frame.pixels of the pixel with this read-out index.
std::ptrdiff_t file_index(const AmplifierFrame& frame, ReadoutIndex index);

}  // namespace straymark
