#pragma once

#include <memory>
#include <string>

#include "camera/camera.h"
#include "io/fits_isolated.h"
#include "night/ports.h"

namespace straymark::io {

/// Reads raw exposures of `camera`, which must outlive the reader and its frames: FITS files of one
/// image for each amplifier or for each detector, plain, gzip or tile-compressed
/// (docs/raw_files.md). `decoder`: the program that decodes compressed images
/// (io/fits_isolated.h).
///
/// A file that changed between `inspect` and the reading of its pixels is refused.
std::unique_ptr<RawReader> make_raw_reader(const Camera& camera,
                                           std::string decoder = kThisProgram);

}  // namespace straymark::io
