#pragma once

#include "camera/camera.h"
#include "core/frames.h"

/// The one place that converts between detector pixels, the focal plane, the telescope frame and
/// the tangent plane. Formulas and signs: docs/conventions.md.

namespace straymark {

FocalPoint focal_from_detector(const FocalPlane& plane, const Detector& detector,
                               DetectorPoint point);
DetectorPoint detector_from_focal(const FocalPlane& plane, const Detector& detector,
                                  FocalPoint point);

/// psi: position angle of the focal frame's +y axis at the boresight, degrees.
/// focal_from_tangent includes the radial distortion; tangent_from_focal inverts it by Newton's
/// method to 1e-14 rad and asserts that the distortion is monotonic there.
FocalPoint focal_from_tangent(const Telescope& telescope, const FocalPlane& plane, double psi_deg,
                              TangentPoint point);
TangentPoint tangent_from_focal(const Telescope& telescope, const FocalPlane& plane, double psi_deg,
                                FocalPoint point);

/// tube_top_deg: position angle of the tube's top at the boresight, degrees.
TelescopePoint telescope_from_focal(const FocalPlane& plane, double psi_deg, double tube_top_deg,
                                    FocalPoint point);
FocalPoint focal_from_telescope(const FocalPlane& plane, double psi_deg, double tube_top_deg,
                                TelescopePoint point);

}  // namespace straymark
