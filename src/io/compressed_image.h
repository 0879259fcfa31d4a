#pragma once

#include <span>
#include <string>

#include "io/fits_writer.h"

namespace straymark::io {

/// An image of 32-bit floats, tile-compressed without loss (GZIP_2). Index y * width + x.
FitsUnit compressed_float_unit(const std::string& name, std::span<const float> pixels, int width,
                               int height, const std::string& unit);

}  // namespace straymark::io
