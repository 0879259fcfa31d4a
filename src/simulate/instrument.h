#pragma once

#include <cstddef>
#include <string>
#include <vector>

#include "simulate/scenario.h"

namespace straymark::simulate {

/// One amplifier as built: its place in the camera, its electronics, and how its clock walks over
/// the detector's pixels.
struct Channel {
    std::string name;  ///< "DETECTOR/AMPLIFIER"
    int detector = 0;
    int number = 0;  ///< in its detector's layout
    int place = 0;   ///< among the channels of its clock
    int prescan = 0, ticks = 0, overscan = 0, rows = 0;
    std::ptrdiff_t first_pixel = 0;  ///< index of the node's pixel in the detector's image
    std::ptrdiff_t tick_step = 0;    ///< of that index, from tick to tick
    std::ptrdiff_t row_step = 0;
    double gain_e_per_adu = 0.0;
    double read_noise_e = 0.0;
    double bias_adu = 0.0;

    [[nodiscard]] int ticks_in_row() const { return prescan + ticks + overscan; }
    /// Index in the detector's image of the pixel clocked out in `row` at data tick `tick`, counted
    /// without prescan.
    [[nodiscard]] std::ptrdiff_t pixel(int tick, int row) const {
        return first_pixel + tick * tick_step + row * row_step;
    }
};

/// One detector as built.
struct Chip {
    std::string id;
    std::string board;
    int clock = 0;
    int width = 0;
    int height = 0;
    Vec2 first_pixel_mm;  ///< centre of pixel (0, 0)
    Vec2 column_mm;       ///< from one column to the next
    Vec2 row_mm;
    double full_well_e = 0.0;
    bool bleeds_along_x = false;  ///< the axis along which packets are shifted from row to row
    int first_channel = 0;
    int channels = 0;

    /// Pixel coordinates (0-based, pixel centres at whole numbers) of a place on the focal plane.
    [[nodiscard]] Vec2 pixel(Vec2 focal_mm) const;
    [[nodiscard]] Vec2 focal(Vec2 pixel) const;
};

/// All amplifiers that one clock drives: they put out their levels in step.
struct ClockGroup {
    std::string name;
    std::vector<int> channels;  ///< ascending
    int ticks_in_row = 0;
    int rows = 0;
};

/// The camera as the seed built it.
struct Instrument {
    std::vector<Chip> chips;
    std::vector<Channel> channels;  ///< detector by detector
    std::vector<ClockGroup> clocks;
};

/// Draws what differs from one copy to the next (gain, noise, bias, full well) from the seed.
/// Preconditions, checked where the scenario is read: directions at right angles, sections inside
/// the detector, equal ticks and rows within one clock.
Instrument build_instrument(const Scenario& scenario);

}  // namespace straymark::simulate
