#pragma once

#include <span>

#include "core/pixel_box.h"
#include "io/files.h"
#include "io/fits_scan.h"

namespace straymark::io {

/// Pixels of a plain (not compressed) two-dimensional image as physical values
/// BZERO + BSCALE * stored, rounded to float; BLANK and not-a-number become NaN.
/// box: pixels wanted, within the image; out: box.width() * box.height() values, row after row.
/// Thread-safe.
void read_pixels(const InputFile& file, const FitsHdu& hdu, const PixelBox& box,
                 std::span<float> out);

}  // namespace straymark::io
