#pragma once

#include <array>
#include <cstddef>
#include <string_view>

/// Names and sizes in an indexed star list that its writer and its reader share.

namespace straymark::io {

inline constexpr std::string_view kStarListFormat = "straymark-stars/1";
inline constexpr std::string_view kFormatCard = "FORMAT";
inline constexpr std::string_view kContentCard = "CONTENT";  ///< digest of all after the primary
inline constexpr std::string_view kCellSizeCard = "CELLSIZE";

inline constexpr std::string_view kStarsTable = "STARS";
inline constexpr std::string_view kIndexTable = "INDEX";
/// Exactly one of these two follows the index.
inline constexpr std::string_view kDiscsTable = "DISCS";
inline constexpr std::string_view kCellsTable = "CELLS";

/// Columns of STARS between the id, whose width varies, and the magnitudes.
struct FixedStarColumn {
    std::string_view name, form, unit;
};
inline constexpr std::array<FixedStarColumn, 5> kFixedStarColumns{{{"ra", "1D", "deg"},
                                                                   {"dec", "1D", "deg"},
                                                                   {"epoch", "1E", "yr"},
                                                                   {"pmra", "1E", "mas/yr"},
                                                                   {"pmdec", "1E", "mas/yr"}}};
inline constexpr std::size_t kMostMagColumns = 64;

}  // namespace straymark::io
