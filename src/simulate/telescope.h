#pragma once

#include <optional>

#include "simulate/scenario.h"
#include "simulate/vectors.h"

namespace straymark::simulate {

/// Unit vector to the zenith, ICRS axes, at `mjd` UTC (taken for UT1). Sidereal time and precession
/// of the IAU 2006 model without nutation, aberration and polar motion: good to 20 arcsec in this
/// century.
/// Source: Capitaine et al. 2003, A&A 412, 567 (precession angles); Capitaine et al. 2000, A&A
/// 355, 398 (Earth rotation angle).
Vec3 zenith(const SitePlan& site, double mjd);

/// 1 / cos of the angle from the zenith, flattened at the horizon by Young & Irvine 1967, AJ 72,
/// 945; nothing below 10 degrees above the horizon.
std::optional<double> airmass(Vec3 towards_zenith, Vec3 towards_star);

/// A telescope held at one place of the sky: three unit vectors fixed to the camera.
class Aim {
public:
    /// ahead: boresight. The camera's up direction (focal +y) is turned by `camera_angle_deg` from
    /// north through east.
    Aim(const TelescopePlan& telescope, Vec3 ahead, double camera_angle_deg);

    /// Where the image of a star falls on the focal plane, mm; nothing for one over 60 degrees
    /// away.
    [[nodiscard]] std::optional<Vec2> image(Vec3 star) const;
    [[nodiscard]] Vec3 ahead() const { return ahead_; }
    [[nodiscard]] Vec3 up() const { return up_; }
    [[nodiscard]] Vec3 right() const { return right_; }

private:
    Vec3 ahead_, up_, right_;
    double focal_length_mm_, third_order_, fifth_order_;
};

/// `ahead` moved east and north by small angles (arcsec), along great circles.
Vec3 nudged(Vec3 ahead, Vec2 east_north_arcsec);

/// Right ascension in [0, 360) and declination, degrees.
struct Equatorial {
    double ra_deg = 0.0;
    double dec_deg = 0.0;
};
Equatorial equatorial(Vec3 towards);

}  // namespace straymark::simulate
