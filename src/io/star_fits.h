#pragma once

#include <memory>
#include <string>

#include "io/star_rows.h"

namespace straymark::io {

/// The first table of a FITS file. Throws InputError: no table, a table longer than the file, a
/// compressed one.
std::unique_ptr<StarRows> read_star_fits(const std::string& path);

}  // namespace straymark::io
