#pragma once

#include <string>
#include <vector>

#include "camera/camera.h"
#include "io/files.h"
#include "io/fits_scan.h"
#include "io/raw_placement.h"

namespace straymark::io {

/// Cards of a raw image's WCS, its reference pixel moved from the raw image (prescan included, one
/// amplifier's perhaps) to the detector's own trimmed image. Taken from the first HDU whose pixels
/// lie in the detector's own direction along both axes, so that a shift is all that it takes.
/// Empty: no such HDU, or it carries no CRPIX1 and CRPIX2.
std::vector<std::string> detector_wcs_cards(const Detector& detector,
                                            const DetectorPlacement& placement,
                                            const InputFile& file, const FitsStructure& structure);

}  // namespace straymark::io
