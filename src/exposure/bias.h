#pragma once

#include <string>
#include <vector>

#include "exposure/frame.h"
#include "exposure/plane.h"

namespace straymark {

/// Electronic zero level of each row of an amplifier, raw ADU.
struct BiasLevels {
    std::vector<float> rows;  ///< for each row of the plane
    double mean = 0.0;
};

/// Measures the bias from the overscan strips; where there are none that share the data's rows,
/// from the prescan; else one level from strips beyond the last row; else zero.
///
/// Promises: a level does not move by more than its noise where fewer than half of a row's columns,
/// or fewer than 15 consecutive rows, hold something else than bias (echoes and deferred charge of
/// bright stars). The first columns after the data, where deferred charge and lagged echoes fall,
/// are left out when enough others remain.
BiasLevels measure_bias(const AmplifierFrame& frame, const AmplifierPlane& plane);

}  // namespace straymark
