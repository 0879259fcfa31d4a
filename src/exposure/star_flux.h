#pragma once

#include <optional>

#include "camera/camera.h"
#include "exposure/header.h"

namespace straymark {

/// Electrons that a star of magnitude 0 leaves in one exposure through clear air: from the filter's
/// zero point (1 e-/s at airmass 1) and extinction at the boresight's airmass in mid-exposure.
/// Nothing where the filter is not in the camera file or the boresight is below the horizon.
std::optional<double> zero_magnitude_flux_e(const Camera& camera, const ExposureHeader& header);

}  // namespace straymark
