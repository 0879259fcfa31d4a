#pragma once

#include <vector>

#include "io/fits_writer.h"
#include "mask/mask_file.h"

namespace straymark::io {

/// The tables that explain a mask: BITS, MARKS, DETECTION, PSF and ASSESSED, in this order
/// (docs/mask_file.md).
std::vector<FitsUnit> mask_table_units(const MaskFileTables& tables);

}  // namespace straymark::io
