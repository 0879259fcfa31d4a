#pragma once

#include <string>

#include "camera/camera.h"

namespace straymark::io {

/// Reads a camera file (docs/camera_file.md) with the tables it names, resolved beside it. What is
/// returned is complete and consistent: every number in its stated range, every amplifier with its
/// row in the amplifier table, sections that tile each detector, struts inside the aperture.
/// Throws InputError with file, line and column.
Camera load_camera(const std::string& path);

}  // namespace straymark::io
