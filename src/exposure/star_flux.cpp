#include "exposure/star_flux.h"

#include <cmath>

#include "sky/projection.h"

namespace straymark {

std::optional<double> zero_magnitude_flux_e(const Camera& camera, const ExposureHeader& header) {
    const auto filter = camera.filters.find(header.filter);
    if (filter == camera.filters.end()) {
        return std::nullopt;
    }
    const Horizontal place =
        horizontal_from_sky(camera.observatory, header.boresight, header.middle());
    if (place.altitude_deg < 0.0) {
        return std::nullopt;
    }
    const double lost_mag = filter->second.extinction * (airmass(place.altitude_deg) - 1.0);
    return header.exposure_s * std::pow(10.0, 0.4 * (filter->second.zero_point - lost_mag));
}

}  // namespace straymark
