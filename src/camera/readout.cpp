#include "camera/readout.h"

namespace straymark {

ReadoutGeometry::ReadoutGeometry(PixelBox section, Corner corner, SerialAxis serial,
                                 int prescan_ticks, int first_row)
    : section_(section), first_tick_(prescan_ticks), first_row_(first_row) {
    const bool from_left = corner == Corner::lower_left || corner == Corner::upper_left;
    const bool from_below = corner == Corner::lower_left || corner == Corner::lower_right;
    const int step_x = from_left ? 1 : -1;
    const int step_y = from_below ? 1 : -1;
    const bool along_x = serial == SerialAxis::x;
    tick_dx_ = along_x ? step_x : 0;
    tick_dy_ = along_x ? 0 : step_y;
    row_dx_ = along_x ? 0 : step_x;
    row_dy_ = along_x ? step_y : 0;
    end_tick_ = first_tick_ + (along_x ? section.width() : section.height());
    end_row_ = first_row_ + (along_x ? section.height() : section.width());
    const int corner_x = from_left ? section.x0 : section.x1 - 1;
    const int corner_y = from_below ? section.y0 : section.y1 - 1;
    origin_x_ = corner_x - first_tick_ * tick_dx_ - first_row_ * row_dx_;
    origin_y_ = corner_y - first_tick_ * tick_dy_ - first_row_ * row_dy_;
}

}  // namespace straymark
