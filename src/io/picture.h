#pragma once

#include <cstdint>
#include <span>
#include <string>

namespace straymark::io {

/// Writes a PNG of 8-bit red, green and blue, complete or not at all (OutputFile).
/// rgb: 3 * width * height bytes, row by row from the top. Precondition: both sides at least 1.
/// The bytes depend on the pixels alone. Throws SystemError (disk full, permission).
void write_png(const std::string& path, int width, int height, std::span<const std::uint8_t> rgb);

}  // namespace straymark::io
