#pragma once

#include <span>
#include <vector>

#include "core/pixel_box.h"

namespace straymark {

/// Which connected blob each run of a list belongs to.
struct RunComponents {
    std::vector<int> label;  ///< for each run, in the list's order: 0 ... count - 1
    int count = 0;
};

/// Labels the 8-connected components of `runs`, which must be sorted by row, then start, and not
/// overlap (touching is allowed). Labels are numbered in the order of each component's first run.
/// Time O(n) but for the inverse Ackermann factor of union-find; memory O(n).
/// Source: Rosenfeld & Pfaltz 1966, J. ACM 13, 471 (equivalences), on runs instead of pixels.
RunComponents connected_components(std::span<const PixelRun> runs);

}  // namespace straymark
