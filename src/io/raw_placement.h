#pragma once

#include <optional>
#include <string>
#include <vector>

#include "camera/camera.h"
#include "core/frames.h"
#include "core/pixel_box.h"
#include "io/files.h"
#include "io/fits_scan.h"

/// Where the pixels of each amplifier lie in a raw file, and in which order they were read. The
/// only place that interprets `raw` of the camera file (docs/raw_files.md).

namespace straymark::io {

/// One amplifier's pixels in a raw file. Boxes are 0-based pixels of the HDU's image.
struct AmplifierPlacement {
    int hdu = 0;  ///< its place in FitsStructure::hdus
    PixelBox data;
    std::optional<PixelBox> bias, prescan;
    bool shared = false;  ///< the HDU holds other amplifiers' pixels too
    /// Read-out index of the pixel at (data.x0, data.y0), and its steps per column and row.
    ReadoutIndex origin;
    int tick_per_column = 1, row_per_column = 0, tick_per_row = 0, row_per_row = 1;
};

struct DetectorPlacement {
    std::vector<std::optional<AmplifierPlacement>> amplifiers;  ///< nothing: not in this file
    std::vector<std::string> missing;                           ///< by amplifier: why; empty: there
    std::vector<std::string> notes;
    [[nodiscard]] bool present() const;
};

/// Finds the HDUs of `detector` and places its amplifiers. Throws InputError: sections that are
/// malformed, outside their image, or disagree with the camera file (swapped HDUs, other sizes,
/// binned pixels, prescan), two HDUs of one name, pixel order not stated.
DetectorPlacement placed_detector(const Camera& camera, int detector, const InputFile& file,
                                  const FitsStructure& structure);

/// For each HDU: does an amplifier of the camera claim it by name?
std::vector<bool> claimed_hdus(const Camera& camera, const FitsStructure& structure);

/// The HDU name of an amplifier by the camera's pattern: what a missing one should be called.
std::string hdu_name(const Camera& camera, AmplifierRef amplifier);

}  // namespace straymark::io
