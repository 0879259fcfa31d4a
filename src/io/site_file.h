#pragma once

#include <string>

#include "night/site.h"

namespace straymark::io {

/// Reads a site file (docs/site_file.md), the camera it names, with its tables, and the defects.
/// Other files it names are not opened: they may not exist yet. Throws InputError.
Site load_site(const std::string& path);

}  // namespace straymark::io
