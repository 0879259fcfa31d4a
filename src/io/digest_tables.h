#pragma once

#include <span>
#include <vector>

#include "exposure/digest.h"
#include "io/files.h"
#include "io/fits_scan.h"
#include "io/fits_writer.h"

namespace straymark::io {

/// An exposure's digest as FITS tables (docs/digest_file.md).
std::vector<FitsUnit> digest_units(const ExposureDigest& digest);

/// The digest that such tables hold; everything equals what was written, bit for bit. Throws
/// InputError where a table is missing or the tables contradict each other.
ExposureDigest digest_from(const InputFile& file, std::span<const FitsHdu> units);

}  // namespace straymark::io
