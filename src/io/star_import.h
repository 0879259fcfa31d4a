#pragma once

#include <cstdint>
#include <functional>
#include <map>
#include <string>
#include <vector>

#include "io/star_file.h"

namespace straymark::io {

struct StarImportSettings {
    /// Our column name -> the table's, where they differ.
    std::map<std::string, std::string> columns;
    /// What the list covers; empty: found out from its stars.
    std::vector<CoveredDisc> covers;
    /// Memory for the stars that are being sorted.
    std::size_t batch_bytes = 64U << 20U;
};

struct StarImportReport {
    std::int64_t stars = 0;
    std::vector<std::string> mag_columns;
    StarCoverage coverage;
};

/// Turns a star list (FITS table, VOTable or CSV, told apart by how the file begins) into the
/// indexed list that the other commands read. `progress`: called now and then with the number of
/// rows read.
/// Throws InputError naming the file and the row: no such column, a unit that is not ours, a
/// position outside the sky, an id that is missing, no rows at all. Then nothing is written.
StarImportReport import_star_list(const std::string& from, const std::string& to,
                                  const StarImportSettings& settings,
                                  const std::function<void(std::int64_t)>& progress);

}  // namespace straymark::io
