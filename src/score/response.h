#pragma once

#include <vector>

#include "score/truth.h"

namespace straymark::score {

/// Bound on the response that true_response leaves out (see there).
inline constexpr double kResponseLeftOut = 0.001;

/// The response of the detection filter to the true signal (docs/conventions.md, "When a pixel is
/// flagged"), with the true point-spread function P and the true noise of the pixel's amplifier:
///
///     response(p) = sum_q a(q) D(q - p) / (noise(p) sqrt(sum P^2))
///
/// Given:    detector; background_px: side of the box whose mean the detection subtracts (D = P
///           minus that box), 0: none. An even box reaches one pixel farther to lower x and y.
/// Returned: response of every pixel, [y * width + x]. The signal is zero beyond the edges.
/// Promises: exact to rounding, but that stretches in which no pixel's signal could make a response
///           of kResponseLeftOut count as empty.
/// By Fourier transform in overlapping tiles, two real tiles to each complex transform; shares
/// nothing with the code that makes masks.
std::vector<float> true_response(const TrueDetector& detector, int background_px);

}  // namespace straymark::score
