#pragma once

#include <memory>
#include <string>

#include "io/star_rows.h"

namespace straymark::io {

/// Comma-separated text with a header row. Throws InputError where there is none.
std::unique_ptr<StarRows> read_star_csv(const std::string& path);

}  // namespace straymark::io
