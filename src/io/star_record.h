#pragma once

#include <cstddef>
#include <limits>
#include <span>
#include <string>
#include <vector>

#include "core/frames.h"

namespace straymark::io {

inline constexpr std::size_t kLongestStarId = 64;
inline constexpr double kDefaultStarEpoch = 2000.0;  ///< Julian year, where no column says

/// One star with all its magnitudes, as it stands in an indexed list.
struct StarRecord {
    std::string id;  ///< 1 to kLongestStarId printable ASCII characters, no blank at its end
    SkyPoint position;
    float epoch = 2000.0F;
    float pm_ra_mas_yr = 0.0F;
    float pm_dec_mas_yr = 0.0F;
    std::vector<float> mags;  ///< NaN: not listed in that filter
};

/// The numbers of one row, in FITS byte order: ra, dec (8 bytes each), epoch, pmra, pmdec and the
/// magnitudes (4 bytes each).
inline constexpr std::size_t kFixedStarBytes = 2 * 8 + 3 * 4;
inline std::size_t star_number_bytes(std::size_t mags) {
    return kFixedStarBytes + 4 * mags;
}
void store_star_numbers(const StarRecord& star, std::span<std::byte> to);
SkyPoint stored_position(const std::byte* numbers);

}  // namespace straymark::io
