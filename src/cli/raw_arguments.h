#pragma once

#include <string>
#include <vector>

namespace straymark::cli {

/// Raw files as the user names them: a file stands for itself, a folder for all FITS files in it
/// (.fits, .fit, .fts, also with .fz or .gz), not those in its subfolders nor hidden ones. Sorted.
/// Throws UsageError for a folder without any; a file that does not exist is kept, to be reported.
std::vector<std::string> raw_files_from(const std::vector<std::string>& arguments);

}  // namespace straymark::cli
