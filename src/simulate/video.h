#pragma once

#include <cstdint>
#include <vector>

#include "simulate/charge.h"
#include "simulate/coupling.h"
#include "simulate/instrument.h"

namespace straymark::simulate {

/// Sets `level` to what the channels of a clock put out while `row` is clocked, above the level of
/// an empty pixel: nothing in prescan and overscan, charge over gain between. `images`: one for
/// each detector.
void video_row(const Instrument& instrument, const ClockGroup& group,
               const std::vector<Image>& images, int row, LevelRow& level);

/// The level of an empty pixel of one channel through one exposure, with its slow drift.
class BiasLevel {
public:
    BiasLevel(const Scenario& scenario, const Instrument& instrument, int exposure, int channel);
    [[nodiscard]] double at(int row) const;

private:
    double level_adu_, drift_adu_, phase_, slope_adu_per_row_, turns_per_row_;
};

/// One row of converter output: level, echo and bias with read noise, rounded to whole numbers and
/// held between 0 and the converter's largest.
void digitise_row(const Scenario& scenario, const Instrument& instrument, int exposure, int channel,
                  int row, double bias_adu, const float* level, const float* echo,
                  std::uint16_t* out);

}  // namespace straymark::simulate
