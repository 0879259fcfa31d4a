#include <cmath>

#include "camera/geometry.h"
#include "sky/projection.h"
#include "sky/wcs.h"

namespace straymark {

SkyPoint sky_from_detector(const Camera& camera, const Pointing& pointing, int detector,
                           DetectorPoint point) {
    const Detector& device = camera.detectors[static_cast<std::size_t>(detector)];
    const FocalPoint focal = focal_from_detector(camera.focal_plane, device, point);
    return sky_from_tangent(
        pointing.boresight,
        tangent_from_focal(camera.telescope, camera.focal_plane, pointing.psi_deg, focal));
}

std::optional<DetectorPoint> detector_from_sky(const Camera& camera, const Pointing& pointing,
                                               int detector, SkyPoint point) {
    const std::optional<TangentPoint> tangent = tangent_from_sky(pointing.boresight, point);
    if (!tangent) {
        return std::nullopt;
    }
    const Detector& device = camera.detectors[static_cast<std::size_t>(detector)];
    return detector_from_focal(
        camera.focal_plane, device,
        focal_from_tangent(camera.telescope, camera.focal_plane, pointing.psi_deg, *tangent));
}

}  // namespace straymark
