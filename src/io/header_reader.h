#pragma once

#include <string>
#include <vector>

#include "camera/camera.h"
#include "exposure/header.h"
#include "io/fits_cards.h"

namespace straymark::io {

/// A header and how messages name it.
struct PlacedHeader {
    std::string place;  ///< "HDU 0 (primary)"
    FitsHeader header;
};

/// What the headers of one raw file say of its exposure, by the keywords of the camera file.
/// headers: in the order in which a keyword is sought: the primary header, then those of the
/// camera's own HDUs. Fallbacks are taken as docs/raw_files.md says, and stated in the notes.
/// Throws InputError, naming file, HDU and keyword: what is indispensable is missing or makes no
/// sense. Of a dark, flat or focus frame the filter, pointing and camera angle are not
/// indispensable: where they fail, the boresight is NaN (the filter empty) and a note says why.
ExposureHeader read_exposure_header(const Camera& camera, const std::string& file,
                                    const std::vector<PlacedHeader>& headers);

}  // namespace straymark::io
