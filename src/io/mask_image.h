#pragma once

#include <string>
#include <vector>

#include "io/fits_writer.h"
#include "mask/decide.h"

namespace straymark::io {

/// The bits of one detector as a tile-compressed image (PLIO_1, one tile for each row, signed 16
/// bits; docs/mask_file.md) named `detector`, with the cards of its WCS. Bit 15 is not in use
/// (asserted).
FitsUnit mask_image_unit(const std::string& detector, const DetectorMask& mask,
                         const std::vector<std::string>& wcs_cards);

}  // namespace straymark::io
