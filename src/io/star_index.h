#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "io/files.h"
#include "io/star_file.h"

namespace straymark::io {

/// Where the rows of one table are.
struct StarListTable {
    std::int64_t offset = 0;  ///< of the first row, in the file
    std::int64_t row_bytes = 0;
    std::int64_t rows = 0;
};

/// All of an indexed star list but the stars.
struct StarListIndex {
    std::string digest;
    StarListTable stars;
    std::size_t id_width = 0;  ///< bytes of each row's id; the numbers follow
    std::vector<std::string> mags;
    double cell_size_deg = kStarCellSize_deg;
    std::vector<std::int32_t> cells;  ///< that hold stars, ascending
    std::vector<std::int64_t> first;  ///< row of each cell; one more at the end
    StarCoverage coverage;
};

/// Reads and checks headers, index and coverage. Throws InputError where the file is damaged,
/// truncated or not an indexed star list.
StarListIndex read_star_index(const InputFile& file);

[[noreturn]] void refuse_star_list(const std::string& path, std::string place, std::string found,
                                   std::string expected);

}  // namespace straymark::io
