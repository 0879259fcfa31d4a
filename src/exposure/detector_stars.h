#pragma once

#include <vector>

#include "camera/camera.h"
#include "exposure/digest.h"
#include "exposure/star_finder.h"

namespace straymark {

/// The stars of a detector, brightest first, from the candidates of its amplifiers (in the camera's
/// order): those whose images are about as large as most, their flux corrected for what the
/// aperture misses of the point-spread function (of a Moffat profile as wide as the images, beta 3,
/// where the detector has none of its own).
std::vector<MeasuredStar> detector_stars(const Detector& detector,
                                         const std::vector<std::vector<StarCandidate>>& candidates,
                                         const Psf& psf);

}  // namespace straymark
