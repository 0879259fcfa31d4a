#pragma once

#include <memory>
#include <string>

#include "io/star_rows.h"

namespace straymark::io {

/// The first table of a VOTable (IVOA recommendation 1.4): TABLEDATA, BINARY or BINARY2 in the
/// document itself. Read as a stream: memory does not grow with the table. Entities that the
/// document declares itself are refused. Throws InputError.
std::unique_ptr<StarRows> read_star_votable(const std::string& path);

}  // namespace straymark::io
