#include "simulate/telescope.h"

#include <catch2/catch.hpp>
#include <cmath>

#include "simulate/instrument.h"
#include "simulate/small_world.h"

namespace straymark::simulate {
namespace {

TelescopePlan telescope(bool mirrored) {
    TelescopePlan plan;
    plan.focal_length_mm = 8280.0;
    plan.mirrored = mirrored;
    return plan;
}

// WCSLIB and this program agree to rounding: 1e-13 of some 200 mm.
constexpr double kRounding_mm = 1e-9;

struct Imaged {
    double ra_deg, dec_deg, angle_deg;
    bool mirrored;
    double star_ra_deg, star_dec_deg, x_mm, y_mm;
};

}  // namespace

TEST_CASE("stars fall where a gnomonic projection by WCSLIB puts them") {
    // astropy.wcs (WCSLIB 7.12), RA---TAN with CRPIX 0 and, for k degrees in a millimetre, camera
    // angle a and parity p (-1 mirrored), CD = k [[-p cos a, sin a], [p sin a, cos a]]: +y points
    // to position angle a, and +x to the west at a = 0 and p = 1.
    const Imaged expected = GENERATE(
        Imaged{84, 28, 0, false, 84.2, 28.1, -25.49591423080069, 14.472300380460304},
        Imaged{84, 28, 0, false, 83.7, 27.8, 38.3505736922867, -28.855943461770334},
        Imaged{84, 28, 30, false, 84.2, 28.1, -14.843959226352435, 25.28133689607817},
        Imaged{84, 28, -123, true, 84.2, 28.1, -1.748577743931758, -29.264852581894942},
        Imaged{190.35, -75, 200, false, 191.0, -75.2, 32.477958899643646, 19.076712362264608},
        Imaged{190.35, -75, 200, false, 186.0, -74.5, -180.36174393474423, -4.711197274105842});
    const Aim aim(telescope(expected.mirrored), direction(expected.ra_deg, expected.dec_deg),
                  expected.angle_deg);
    const auto place = aim.image(direction(expected.star_ra_deg, expected.star_dec_deg));
    REQUIRE(place);
    CHECK(place->x == Approx(expected.x_mm).margin(kRounding_mm));
    CHECK(place->y == Approx(expected.y_mm).margin(kRounding_mm));
}

TEST_CASE("distortion stretches along the radius") {
    TelescopePlan plan = telescope(false);
    plan.stretch_third_order = 12.0;
    plan.stretch_fifth_order = -3000.0;
    const Vec3 ahead = direction(84, 28);
    const Vec3 star = direction(84.2, 28.1);
    const Vec2 plain = *Aim(telescope(false), ahead, 30).image(star);
    const Vec2 stretched = *Aim(plan, ahead, 30).image(star);
    const double t = std::tan(std::acos(dot(ahead, star)));
    const double factor = 1.0 + 12.0 * t * t - 3000.0 * t * t * t * t;
    CHECK(stretched.x == Approx(factor * plain.x).epsilon(1e-12));
    CHECK(stretched.y == Approx(factor * plain.y).epsilon(1e-12));
}

TEST_CASE("a star on the other side of the sky has no image") {
    CHECK_FALSE(Aim(telescope(false), direction(84, 28), 0).image(direction(264, -28)));
}

TEST_CASE("the zenith lies where ERFA puts it") {
    // ERFA 2.0: direction (gmst06 + longitude, latitude), carried to ICRS by the transpose of
    // pmat06 (precession and frame bias), TT - UTC 69.184 s, UT1 = UTC.
    struct Case {
        double mjd, ra_deg, dec_deg;
    };
    const Case expected = GENERATE(Case{61426.18, 74.27803166383882, 31.1597443287566},
                                   Case{45000.75, 290.4035177353263, 31.234633951504232},
                                   Case{70000.4, 324.52020156154117, 30.97017125550982});
    const Vec3 up = zenith({31.2, -110.4, 2120}, expected.mjd);
    const Vec3 reference = direction(expected.ra_deg, expected.dec_deg);
    // Frame bias (0.02 arcsec) is left out, and UTC stands for TT in the precession (1e-4 arcsec).
    constexpr double kAllowed_arcsec = 0.05;
    const Vec3 miss = cross(up, reference);
    CHECK(std::asin(std::sqrt(dot(miss, miss))) / kArcsecond < kAllowed_arcsec);
}

TEST_CASE("airmass is 1 overhead, 2.9 at 70 degrees, and undefined near the horizon") {
    // Young & Irvine 1967 at 70 degrees: sec 2.9238, times 1 - 0.0012 (2.9238^2 - 1).
    CHECK(*airmass(kPole, kPole) == Approx(1.0));
    CHECK(*airmass(kPole, direction(0, 20)) == Approx(2.8973).margin(1e-4));
    CHECK_FALSE(airmass(kPole, direction(0, 5)));
    CHECK_FALSE(airmass(kPole, direction(0, -50)));
}

TEST_CASE("a nudge moves east and north by the angle asked for") {
    const Equatorial moved = equatorial(nudged(direction(84.0, 60.0), {36.0, -18.0}));
    // East by 36 arcsec is 36 / cos(60 deg) = 72 arcsec of right ascension, to second order.
    CHECK((moved.ra_deg - 84.0) * 3600.0 == Approx(72.0).margin(0.02));
    CHECK((moved.dec_deg - 60.0) * 3600.0 == Approx(-18.0).margin(0.02));
}

TEST_CASE("a pixel is found again from where it lies on the focal plane") {
    const Instrument instrument = build_instrument(small_scenario());
    for (const Chip& chip : instrument.chips) {
        const Vec2 back = chip.pixel(chip.focal({17.25, 40.5}));
        CHECK(back.x == Approx(17.25).margin(1e-9));
        CHECK(back.y == Approx(40.5).margin(1e-9));
    }
}

TEST_CASE("the detector's centre lies where the scenario says, whichever way it is mounted") {
    const Instrument instrument = build_instrument(small_scenario());
    for (const Chip& chip : instrument.chips) {
        const Vec2 centre = chip.focal({47.5, 31.5});  // of 96 x 64 pixels
        CHECK(centre.x == Approx(chip.id == "p" ? -0.8 : 0.8));
        CHECK(centre.y == Approx(0.0).margin(1e-12));
    }
    // Upside down: the first pixel lies to the upper right of the centre.
    CHECK(instrument.chips[1].focal({0, 0}).x > 0.8);
    CHECK(instrument.chips[1].focal({0, 0}).y > 0.0);
}

}  // namespace straymark::simulate
