#include "sky/stars.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <erfa.h>
#include <erfam.h>

#include "sky/projection.h"

using namespace straymark;

namespace {

constexpr double kMasPerDegree = 3.6e6;

MjdUtc mjd_of_epoch(double year) {
    double zero = 0.0;
    double mjd = 0.0;
    eraEpj2jd(year, &zero, &mjd);
    return {mjd};
}

}  // namespace

TEST_CASE("Barnard's star moves in fifty years as ERFA moves it") {
    // Hipparcos catalogue (ESA SP-1200): HIP 87937, epoch 1991.25; parallax 549.01 mas.
    const Star star{"HIP 87937", {269.45402305, 4.66828815}, 9.54, 1991.25, -797.84, 10326.93};
    double ra = 0.0;
    double dec = 0.0;
    double pm_ra = 0.0;
    double pm_dec = 0.0;
    double parallax = 0.0;
    double velocity = 0.0;
    const double dec_rad = star.position.dec_deg * ERFA_DD2R;
    double zero = 0.0;
    double from = 0.0;
    eraEpj2jd(star.epoch, &zero, &from);
    const MjdUtc to = mjd_of_epoch(star.epoch + 50.0);
    REQUIRE(eraPmsafe(star.position.ra_deg * ERFA_DD2R, dec_rad,
                      star.pm_ra_mas_yr * 1e-3 * ERFA_DAS2R / std::cos(dec_rad),
                      star.pm_dec_mas_yr * 1e-3 * ERFA_DAS2R, 0.54901, 0.0, ERFA_DJM0, from,
                      ERFA_DJM0, to.days, &ra, &dec, &pm_ra, &pm_dec, &parallax, &velocity) >= 0);
    const SkyPoint moved = propagated(star, to);
    // ERFA's light time and relativity: the speed is 3e-4 of light's, so 518 arcsec are off by
    // 5e-8 of themselves, and the light time over the change of distance by some 0.1 mas.
    constexpr double kTolerance_mas = 1.0;
    CHECK(separation_deg(moved, {ra * ERFA_DR2D, dec * ERFA_DR2D}) * kMasPerDegree <
          kTolerance_mas);
    CHECK(separation_deg(moved, star.position) * 3600.0 == Approx(517.9).margin(0.1));
}

TEST_CASE("A star without proper motion, or at its own epoch, stays exactly where it is") {
    const Star still{"a", {123.456, -7.0}, 5.0, 2016.0, 0.0, 0.0};
    CHECK(propagated(still, {61041.0}).ra_deg == 123.456);
    const Star moving{"b", {123.456, -7.0}, 5.0, 2000.0, 100.0, 100.0};
    CHECK(propagated(moving, mjd_of_epoch(2000.0)).dec_deg == Approx(-7.0).margin(1e-12));
}

TEST_CASE("Proper motion in right ascension includes the cosine of the declination") {
    const Star star{"c", {359.99999, 60.0}, 5.0, 2000.0, 1000.0, 0.0};
    const SkyPoint moved = propagated(star, mjd_of_epoch(2100.0));
    // 100 arcsec on the sky are 200 arcsec in right ascension; over RA 0.
    CHECK(moved.ra_deg == Approx(200.0 / 3600.0 - 0.00001).margin(1e-6));
    CHECK(separation_deg(moved, star.position) * 3600.0 == Approx(100.0).margin(1e-4));
}

TEST_CASE("A star may cross the pole") {
    const Star star{"d", {30.0, 89.999}, 5.0, 2000.0, 0.0, 72000.0};
    const SkyPoint moved = propagated(star, mjd_of_epoch(2100.0));
    // 2 degrees northwards from 0.001 degrees short of the pole.
    CHECK(moved.ra_deg == Approx(210.0).margin(1e-6));
    CHECK(moved.dec_deg == Approx(90.0 - 1.999).margin(1e-3));
}
