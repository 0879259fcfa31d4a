#pragma once

#include <map>
#include <string>
#include <vector>

#include "camera/camera.h"
#include "core/pixel_box.h"

namespace straymark::io {

/// Permanent defects by detector index. The file: CSV with columns detector, x1, x2, y1, y2, FITS
/// pixels of the detector image, inclusive. Throws InputError: unknown detector, a box outside it,
/// over a million rows.
std::map<int, std::vector<PixelBox>> load_defects(const std::string& path, const Camera& camera);

}  // namespace straymark::io
