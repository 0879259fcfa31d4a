#pragma once

#include <array>
#include <string>

#include "exposure/digest.h"
#include "mask/decide.h"
#include "mask/mask_file.h"
#include "night/site.h"

namespace straymark {

/// Adds one detector's rows to the tables of a mask file: every mark that responds with a quarter
/// of the threshold or more (unmeasured ones: whose bound does), one row for the fainter ones
/// together, one for each unassessed region; what the decision rested on; and who looked.
void append_rows(const Site& site, int detector, const DetectorDigest& digest,
                 const std::array<DetectorMarks, kArtifactKinds>& marks, const DetectorMask& mask,
                 MaskFileTables& tables);

}  // namespace straymark
