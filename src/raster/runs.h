#pragma once

#include <vector>

#include "core/pixel_box.h"

/// Sets of pixels as lists of horizontal runs.

namespace straymark {

/// Sorts by row, then start, and joins runs that overlap or touch within a row; runs without a
/// pixel disappear. Afterwards the same set of pixels has exactly one list. O(n log n).
void normalize_runs(std::vector<PixelRun>& runs);

/// All pixels within `radius` (>= 0) of a pixel of `runs`, centre to centre, clipped to `bounds`;
/// normalized. O(n radius log(n radius)).
std::vector<PixelRun> dilated(const std::vector<PixelRun>& runs, double radius,
                              const PixelBox& bounds);

}  // namespace straymark
