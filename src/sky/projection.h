#pragma once

#include <optional>
#include <string>

#include "camera/camera.h"
#include "core/frames.h"

namespace straymark {

/// Gnomonic projection about `boresight` (ERFA tpxes / tpsts). Nothing for a direction 90 degrees
/// or more from the boresight.
std::optional<TangentPoint> tangent_from_sky(SkyPoint boresight, SkyPoint point);
SkyPoint sky_from_tangent(SkyPoint boresight, TangentPoint point);

/// Angular separation, degrees (ERFA seps).
double separation_deg(SkyPoint a, SkyPoint b);
/// Position angle of `to` seen from `from`, degrees in [0, 360), north through east (ERFA pas).
double position_angle_deg(SkyPoint from, SkyPoint to);

/// Position angle, ICRS at the boresight, of the tube's top (docs/conventions.md): towards the
/// zenith (altaz) or the pole of date (equatorial), plus 180 if flipped. Degrees in [0, 360).
/// Rigorous: two points of that great circle are carried to ICRS at zero pressure (ERFA), DUT1 and
/// polar motion taken as zero. Nothing where it is not defined (boresight at the zenith or pole).
std::optional<double> tube_top_deg(const Observatory& observatory, Mount mount, bool flipped,
                                   SkyPoint boresight, MjdUtc mjd);

/// Hour angle and azimuth/altitude, of date, for reports; degrees.
struct Horizontal {
    double azimuth_deg = 0.0;  ///< north through east
    double altitude_deg = 0.0;
    double hour_angle_deg = 0.0;
};
Horizontal horizontal_from_sky(const Observatory& observatory, SkyPoint point, MjdUtc mjd);

/// Relative thickness of the air along a line of sight at this altitude, degrees, 0 or more.
/// Source: Kasten & Young 1989, Applied Optics 28, 4735.
double airmass(double altitude_deg);

}  // namespace straymark
