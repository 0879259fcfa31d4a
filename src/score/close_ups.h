#pragma once

#include <cstdint>
#include <span>
#include <string_view>
#include <vector>

#include "core/frames.h"
#include "core/pixel_box.h"
#include "score/figure_detector.h"

namespace straymark::score {

/// An echo worth a closer look. Points into the detectors that it was chosen from.
struct CloseUp {
    const FigureDetector* detector = nullptr;
    const TrueEcho* echo = nullptr;
    DetectorPixel centre;     ///< the echo's peak
    double response = 0.0;    ///< there, signed
    std::int64_t wrong = 0;   ///< missed and falsely flagged pixels in its window
    std::string_view reason;  ///< strong, middling, weak or worst
};

/// Odd: the echo's peak is in the middle.
inline constexpr int kCloseUpPx = 37;
/// What a close-up shows; may reach beyond the detector.
PixelBox window_of(const CloseUp& view);

/// Of the echoes that had to be found up to two each of the strongest, from the middle, of the
/// weakest, and of those with most wrong pixels about them; none within another's window.
std::vector<CloseUp> close_ups(std::span<const FigureDetector> detectors);

}  // namespace straymark::score
