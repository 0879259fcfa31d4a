#pragma once

#include <memory>
#include <string>
#include <vector>

#include "io/files.h"
#include "io/star_sorter.h"
#include "sky/stars.h"

/// The indexed star list: a FITS file whose STARS table is sorted by cells of the sky, with an
/// INDEX table that says where each cell begins (docs/star_list.md).

namespace straymark::io {

/// Height of an index cell.
inline constexpr double kStarCellSize_deg = 0.15;

/// A disc of the sky that a list is declared to cover.
struct CoveredDisc {
    SkyPoint centre;
    double radius_deg = 0.0;
};

/// What a list says about where it has stars.
struct StarCoverage {
    std::vector<CoveredDisc> declared;
    /// Cells of `cell_size_deg` that hold stars, ascending, where nothing was declared. Empty also
    /// where the list is too thin to show its own extent.
    double cell_size_deg = kStarCellSize_deg;
    std::vector<std::int32_t> cells;
};

/// Writes the list of all stars in `sorter` (which is drained) under `path`, complete or not at
/// all. mag_columns: names of the magnitudes of each record. declared: empty to find the coverage
/// from the stars. The bytes depend on the stars, names and discs alone.
/// Returns the coverage that was written.
StarCoverage write_star_list(const std::string& path, const SkyCells& cells, StarSorter& sorter,
                             const std::vector<std::string>& mag_columns,
                             std::vector<CoveredDisc> declared);

/// Opens an indexed list. Reads and checks headers, index and coverage (some 20 bytes for each cell
/// with stars); stars are read when asked for. Throws InputError where the file is damaged,
/// truncated or not such a list.
std::unique_ptr<StarList> open_star_list(const std::string& path);

/// Reads the whole list and compares it with the digest in its header. Throws InputError where it
/// does not match, or where it cannot be opened.
void verify_star_list(const std::string& path);

}  // namespace straymark::io
