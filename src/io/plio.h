#pragma once

#include <cstddef>
#include <cstdint>
#include <span>
#include <vector>

namespace straymark::io {

/// Values of a line of pixels that the encoding can hold here: bits 0 to 14.
inline constexpr std::int16_t kLargestPlioValue = 0x7FFF;

/// Encodes lines of pixels as PLIO_1 line lists: big-endian 16-bit words, a header of seven and
/// then instructions (FITS 4.0 section 10.4.3). Lossless; runs of zeros cost a scan. One for each
/// thread.
class PlioEncoder {
public:
    /// line: 1 to 2^27 values of 0 to 32767 (asserted).
    /// Returns the line list, valid until the next call: at most 7 + 3 * line.size() words.
    std::span<const std::byte> encode(std::span<const std::int16_t> line);

private:
    std::vector<std::byte> words_;  ///< reused, as long as the worst line so far
};

}  // namespace straymark::io
