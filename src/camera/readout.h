#pragma once

#include "core/frames.h"
#include "core/pixel_box.h"

namespace straymark {

/// The corner of its section at which an amplifier sits: its first pixel read lies there.
enum class Corner { lower_left, lower_right, upper_left, upper_right };

/// The detector axis along which one row is shifted out, pixel after pixel.
enum class SerialAxis { x, y };

/// Where the ticks and rows of one amplifier lie on its detector image. The only place that knows
/// how a corner and a serial axis turn a clock tick into a pixel.
///
/// Promises: detector_from_readout and readout_from_detector are inverse to each other for every
/// tick and row, also outside the section (echoes that fall into prescan or overscan).
class ReadoutGeometry {
public:
    ReadoutGeometry() = default;
    /// section: the amplifier's pixels on the detector; prescan_ticks: clock ticks before the first
    /// data pixel of a row; first_row: rows that were read (and discarded) before the section's
    /// first.
    ReadoutGeometry(PixelBox section, Corner corner, SerialAxis serial, int prescan_ticks,
                    int first_row = 0);

    [[nodiscard]] DetectorPixel detector_from_readout(ReadoutIndex index) const {
        return {origin_x_ + index.tick * tick_dx_ + index.row * row_dx_,
                origin_y_ + index.tick * tick_dy_ + index.row * row_dy_};
    }
    [[nodiscard]] ReadoutIndex readout_from_detector(DetectorPixel pixel) const {
        const int dx = pixel.x - origin_x_;
        const int dy = pixel.y - origin_y_;
        return {dx * tick_dx_ + dy * tick_dy_, dx * row_dx_ + dy * row_dy_};
    }

    [[nodiscard]] const PixelBox& section() const { return section_; }
    [[nodiscard]] int first_tick() const { return first_tick_; }  ///< of the data pixels
    [[nodiscard]] int end_tick() const { return end_tick_; }      ///< one past the last
    [[nodiscard]] int first_row() const { return first_row_; }
    [[nodiscard]] int end_row() const { return end_row_; }
    /// Is this index a pixel of the section (and not prescan, overscan or nothing)?
    [[nodiscard]] bool holds(ReadoutIndex index) const {
        return index.tick >= first_tick_ && index.tick < end_tick_ && index.row >= first_row_ &&
               index.row < end_row_;
    }
    [[nodiscard]] int tick_dx() const { return tick_dx_; }  ///< step on the detector per tick
    [[nodiscard]] int tick_dy() const { return tick_dy_; }
    [[nodiscard]] int row_dx() const { return row_dx_; }  ///< step on the detector per row
    [[nodiscard]] int row_dy() const { return row_dy_; }

private:
    PixelBox section_;
    int first_tick_ = 0, end_tick_ = 0, first_row_ = 0, end_row_ = 0;
    int origin_x_ = 0, origin_y_ = 0;
    int tick_dx_ = 1, tick_dy_ = 0, row_dx_ = 0, row_dy_ = 1;
};

}  // namespace straymark
