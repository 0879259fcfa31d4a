#pragma once

#include <vector>

#include "camera/camera.h"
#include "core/pixel_box.h"
#include "exposure/digest.h"

namespace straymark {

/// The pixels of a detector into which charge spilled along the columns (the direction in which
/// rows are shifted) from a saturated core: detector pixels, sorted by row, then start, joined.
/// `amplifiers` in the camera's order; those that are not `ok` hold nothing. Columns are followed
/// across amplifiers.
///
/// Bleed is, in each 8-connected blob of saturated pixels,
/// 1. what lies outside the star's round core, as wide along a column as it is along a row (with
///    kCoreStretch of tolerance). Several stars joined by their trails have a core each;
/// 2. in every column that has such pixels: the run-out beyond both saturated ends, as far as
///    pixels stand above what is seen at the same distance from the star along its row, and
///    above the columns beside the trail.
///
/// Bleed may be saturated as well. Cost: linear in the saturated pixels and the kept runs.
std::vector<PixelRun> find_bleed(const Detector& detector,
                                 const std::vector<AmplifierDigest>& amplifiers);

}  // namespace straymark
