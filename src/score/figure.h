#pragma once

#include <span>
#include <string>

#include "score/canvas.h"
#include "score/figure_detector.h"
#include "score/report.h"

namespace straymark::score {

/// A page that shows one exposure: true response on the left and what the mask made of it on the
/// right, for the whole of each detector; below, close-ups of the strongest, a middling and the
/// weakest echoes that had to be found, and of those that came out worst. The headline states the
/// night's figures. Colours are told apart by colour-blind people, too (Okabe & Ito 2008, Color
/// Universal Design).
Canvas figure_of(const NightScore& night, const std::string& exposure,
                 std::span<const FigureDetector> detectors);

}  // namespace straymark::score
