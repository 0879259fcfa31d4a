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
/// focal_from_tangent includes the radial distortion. Beyond the field angle at which its
/// polynomial turns back the radius goes on growing in proportion to t, so that no far star lands
/// in the field and the two functions stay inverse to each other everywhere (to 1e-14 rad).
FocalPoint focal_from_tangent(const Telescope& telescope, const FocalPlane& plane, double psi_deg,
                              TangentPoint point);
TangentPoint tangent_from_focal(const Telescope& telescope, const FocalPlane& plane, double psi_deg,
                                FocalPoint point);

/// The radius at which the distortion polynomial turns back, mm; infinity where it never does.
double distortion_reach_mm(const Telescope& telescope, const FocalPlane& plane);

/// tube_top_deg: position angle of the tube's top at the boresight, degrees.
TelescopePoint telescope_from_focal(const FocalPlane& plane, double psi_deg, double tube_top_deg,
                                    FocalPoint point);
FocalPoint focal_from_telescope(const FocalPlane& plane, double psi_deg, double tube_top_deg,
                                TelescopePoint point);

}  // namespace straymark
