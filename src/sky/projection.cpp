#include "sky/projection.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <erfa.h>
#include <erfam.h>

namespace straymark {
namespace {

double radians(double degrees) {
    return degrees * ERFA_DD2R;
}

double degrees_0_360(double angle_rad) {
    const double degrees = eraAnp(angle_rad) * ERFA_DR2D;
    return degrees < 360.0 ? degrees : 0.0;  // a tiny negative angle rounds up to a full turn
}

SkyPoint sky_point(double ra_rad, double dec_rad) {
    return {degrees_0_360(ra_rad), dec_rad * ERFA_DR2D};
}

/// Everything that carries a direction between ICRS, CIRS and the vertical of one observatory at
/// one instant: no air, DUT1 and polar motion zero.
class Astrometry {
public:
    Astrometry(const Observatory& observatory, MjdUtc mjd) {
        constexpr double kNoAir = 0.0;
        constexpr double kAnyWavelength_um = 0.55;
        double equation_of_origins = 0.0;
        [[maybe_unused]] const int status =
            eraApco13(ERFA_DJM0, mjd.days, 0.0, radians(observatory.longitude_deg),
                      radians(observatory.latitude_deg), observatory.height_m, 0.0, 0.0, kNoAir,
                      0.0, 0.0, kAnyWavelength_um, &context_, &equation_of_origins);
        // +1 is a year beyond the leap second table, which is known to within a second or two.
        assert(status >= 0);
    }

    struct Cirs {
        double ra_rad, dec_rad;
    };
    struct Observed {
        double azimuth_rad, zenith_distance_rad, hour_angle_rad;
    };

    [[nodiscard]] Cirs cirs_from_icrs(SkyPoint point) {
        Cirs out{};
        eraAtciqz(radians(point.ra_deg), radians(point.dec_deg), &context_, &out.ra_rad,
                  &out.dec_rad);
        return out;
    }
    [[nodiscard]] SkyPoint icrs_from_cirs(Cirs point) {
        double ra = 0.0;
        double dec = 0.0;
        eraAticq(point.ra_rad, point.dec_rad, &context_, &ra, &dec);
        return sky_point(ra, dec);
    }
    [[nodiscard]] Observed observed_from_cirs(Cirs point) {
        Observed out{};
        double dec = 0.0;
        double ra = 0.0;
        eraAtioq(point.ra_rad, point.dec_rad, &context_, &out.azimuth_rad, &out.zenith_distance_rad,
                 &out.hour_angle_rad, &dec, &ra);
        return out;
    }
    [[nodiscard]] Cirs cirs_from_observed(double azimuth_rad, double zenith_distance_rad) {
        Cirs out{};
        eraAtoiq("A", azimuth_rad, zenith_distance_rad, &context_, &out.ra_rad, &out.dec_rad);
        return out;
    }

private:
    eraASTROM context_{};
};

/// Closer than this to the zenith or the pole the tube's top has no direction worth its name.
constexpr double kUndefinedWithin_rad = 1.0 * ERFA_DAS2R;
/// The second point lies this far up the great circle. Aberration bends the circle by some 20
/// arcsec over a radian, so the direction at the boresight is good to a hundredth of an arcsecond.
constexpr double kStep_rad = 1e-3;

/// The distance at which the second point is taken, short of the zenith or pole itself.
double step_towards(double distance_rad) {
    return std::min(kStep_rad, 0.5 * distance_rad);
}

std::optional<SkyPoint> point_towards_zenith(Astrometry& astrometry, SkyPoint boresight) {
    const auto observed = astrometry.observed_from_cirs(astrometry.cirs_from_icrs(boresight));
    const double distance = observed.zenith_distance_rad;
    if (distance < kUndefinedWithin_rad || distance > ERFA_DPI - kUndefinedWithin_rad) {
        return std::nullopt;
    }
    return astrometry.icrs_from_cirs(
        astrometry.cirs_from_observed(observed.azimuth_rad, distance - step_towards(distance)));
}

std::optional<SkyPoint> point_towards_pole(Astrometry& astrometry, SkyPoint boresight) {
    const auto of_date = astrometry.cirs_from_icrs(boresight);
    const double distance = ERFA_DPI / 2.0 - of_date.dec_rad;
    if (distance < kUndefinedWithin_rad || distance > ERFA_DPI - kUndefinedWithin_rad) {
        return std::nullopt;
    }
    return astrometry.icrs_from_cirs({of_date.ra_rad, of_date.dec_rad + step_towards(distance)});
}

}  // namespace

std::optional<TangentPoint> tangent_from_sky(SkyPoint boresight, SkyPoint point) {
    TangentPoint out;
    const int status =
        eraTpxes(radians(point.ra_deg), radians(point.dec_deg), radians(boresight.ra_deg),
                 radians(boresight.dec_deg), &out.xi_rad, &out.eta_rad);
    if (status != 0) {
        return std::nullopt;
    }
    return out;
}

SkyPoint sky_from_tangent(SkyPoint boresight, TangentPoint point) {
    double ra = 0.0;
    double dec = 0.0;
    eraTpsts(point.xi_rad, point.eta_rad, radians(boresight.ra_deg), radians(boresight.dec_deg),
             &ra, &dec);
    return sky_point(ra, dec);
}

double separation_deg(SkyPoint a, SkyPoint b) {
    return ERFA_DR2D *
           eraSeps(radians(a.ra_deg), radians(a.dec_deg), radians(b.ra_deg), radians(b.dec_deg));
}

double position_angle_deg(SkyPoint from, SkyPoint to) {
    return degrees_0_360(eraPas(radians(from.ra_deg), radians(from.dec_deg), radians(to.ra_deg),
                                radians(to.dec_deg)));
}

std::optional<double> tube_top_deg(const Observatory& observatory, Mount mount, bool flipped,
                                   SkyPoint boresight, MjdUtc mjd) {
    Astrometry astrometry(observatory, mjd);
    const std::optional<SkyPoint> up = mount == Mount::altaz
                                           ? point_towards_zenith(astrometry, boresight)
                                           : point_towards_pole(astrometry, boresight);
    if (!up) {
        return std::nullopt;
    }
    const double top = position_angle_deg(boresight, *up) + (flipped ? 180.0 : 0.0);
    return top < 360.0 ? top : top - 360.0;
}

Horizontal horizontal_from_sky(const Observatory& observatory, SkyPoint point, MjdUtc mjd) {
    Astrometry astrometry(observatory, mjd);
    const auto observed = astrometry.observed_from_cirs(astrometry.cirs_from_icrs(point));
    return {degrees_0_360(observed.azimuth_rad), 90.0 - observed.zenith_distance_rad * ERFA_DR2D,
            eraAnpm(observed.hour_angle_rad) * ERFA_DR2D};
}

double airmass(double altitude_deg) {
    assert(altitude_deg >= 0.0);
    return 1.0 /
           (std::sin(radians(altitude_deg)) + 0.50572 * std::pow(altitude_deg + 6.07995, -1.6364));
}

}  // namespace straymark
