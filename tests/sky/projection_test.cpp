#include "sky/projection.h"

#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <erfa.h>
#include <erfam.h>

#include "reference_table.h"

using namespace straymark;
using test::number;
using test::ReferenceTable;

namespace {

constexpr Observatory kSite{31.2, -110.4, 2120.0};
constexpr MjdUtc kDate{61041.3};  // 2026-01-01

/// Difference of two angles, degrees, in [-180, 180].
double turn(double a, double b) {
    return std::remainder(a - b, 360.0);
}

/// The ICRS direction seen at an hour angle and declination of date, without air (ERFA).
SkyPoint icrs_from_hour_angle(const Observatory& site, double hour_angle_deg, double dec_deg,
                              MjdUtc mjd) {
    double ra = 0.0;
    double dec = 0.0;
    REQUIRE(eraAtoc13("H", hour_angle_deg * ERFA_DD2R, dec_deg * ERFA_DD2R, ERFA_DJM0, mjd.days,
                      0.0, site.longitude_deg * ERFA_DD2R, site.latitude_deg * ERFA_DD2R,
                      site.height_m, 0.0, 0.0, 0.0, 0.0, 0.0, 0.55, &ra, &dec) >= 0);
    return {ra * ERFA_DR2D, dec * ERFA_DR2D};
}

/// The table of docs: hour angle (hours), declination, latitude, azimuth, altitude, parallactic
/// angle (degrees), all of date; computed with ERFA hd2ae and hd2pa.
struct AngleRow {
    double hour, dec, latitude, azimuth, altitude, parallactic;
};
constexpr std::array<AngleRow, 6> kAngles{{{1, 10, -30, 337.84573, 47.47510, 160.633011},
                                           {-1, 10, -30, 22.15427, 47.47510, -160.633011},
                                           {2, -45, -30, 229.10661, 62.11443, 67.792346},
                                           {-3, -60, -30, 148.33449, 47.66322, -65.402777},
                                           {-4, 60, 32, 35.72929, 42.13931, -97.926421},
                                           {0.25, 31.7, 32, 265.61133, 86.80070, 83.631949}}};

}  // namespace

TEST_CASE("Azimuth, altitude and hour angle are those of the table of date") {
    // The table is rounded to 5 decimals.
    constexpr double kRounding_deg = 1e-5;
    for (const AngleRow& row : kAngles) {
        const Observatory site{row.latitude, 20.0, 100.0};
        const SkyPoint point = icrs_from_hour_angle(site, 15.0 * row.hour, row.dec, kDate);
        const Horizontal seen = horizontal_from_sky(site, point, kDate);
        CHECK(std::abs(turn(seen.azimuth_deg, row.azimuth)) < kRounding_deg);
        CHECK(std::abs(seen.altitude_deg - row.altitude) < kRounding_deg);
        CHECK(std::abs(turn(seen.hour_angle_deg, 15.0 * row.hour)) < kRounding_deg);
    }
}

TEST_CASE("The tube's top is the parallactic angle of date, turned from the pole of date to ICRS") {
    // Aberration (20 arcsec) turns directions by up to 20 arcsec tan(dec); 60 degrees: 0.010.
    constexpr double kAberration_deg = 0.011;
    for (const AngleRow& row : kAngles) {
        const Observatory site{row.latitude, 20.0, 100.0};
        const SkyPoint point = icrs_from_hour_angle(site, 15.0 * row.hour, row.dec, kDate);
        const auto top = tube_top_deg(site, Mount::altaz, false, point, kDate);
        const auto pole = tube_top_deg(site, Mount::equatorial, false, point, kDate);
        REQUIRE(top);
        REQUIRE(pole);
        CHECK(std::abs(turn(*top, row.parallactic + *pole)) < kAberration_deg);
        // 26 years of precession: 20.04 arcsec a year, times sin(ra) / cos(dec).
        const double precessed = 26.0 * 20.04 / 3600.0 * std::sin(point.ra_deg * ERFA_DD2R) /
                                 std::cos(point.dec_deg * ERFA_DD2R);
        CHECK(std::abs(turn(*pole, -precessed)) < 2.0 * kAberration_deg);
    }
}

TEST_CASE("Taking north of date for ICRS north would cost tenths of a degree in 2026") {
    const auto pole = tube_top_deg(kSite, Mount::equatorial, false, {90.0, 60.0}, kDate);
    REQUIRE(pole);
    CHECK(std::abs(turn(*pole, 0.0)) > 0.1);
    CHECK(std::abs(turn(*pole, 0.0)) < 0.5);
}

TEST_CASE("Tube's top and horizontal coordinates agree with astropy's frames") {
    // The reference is rounded to 1e-6 degree and takes its second point 0.05 degree away, over
    // which aberration bends the circle by 20 arcsec * 0.05 / 57 / 2: 2e-6 degree, and more by the
    // secant of the declination (85 degrees: 11).
    constexpr double kTolerance_deg = 5e-5;
    for (const auto& row : ReferenceTable("astropy_tube_top/tube_top.csv").rows) {
        const Observatory site{number(row, "latitude_deg"), number(row, "longitude_deg"),
                               number(row, "height_m")};
        const SkyPoint field{number(row, "ra_deg"), number(row, "dec_deg")};
        const MjdUtc mjd{number(row, "mjd")};
        const auto zenith = tube_top_deg(site, Mount::altaz, false, field, mjd);
        const auto pole = tube_top_deg(site, Mount::equatorial, false, field, mjd);
        REQUIRE(zenith);
        REQUIRE(pole);
        CHECK(std::abs(turn(*zenith, number(row, "zenith_deg"))) < kTolerance_deg);
        CHECK(std::abs(turn(*pole, number(row, "pole_deg"))) < kTolerance_deg);
        const Horizontal seen = horizontal_from_sky(site, field, mjd);
        CHECK(std::abs(seen.altitude_deg - number(row, "altitude_deg")) < kTolerance_deg);
        CHECK(std::abs(turn(seen.azimuth_deg, number(row, "azimuth_deg"))) < kTolerance_deg);
    }
}

TEST_CASE("A meridian flip turns the tube by half a turn") {
    const SkyPoint field{83.6, 22.0};
    const auto before = tube_top_deg(kSite, Mount::equatorial, false, field, kDate);
    const auto after = tube_top_deg(kSite, Mount::equatorial, true, field, kDate);
    REQUIRE(before);
    REQUIRE(after);
    CHECK(std::abs(turn(*after, *before + 180.0)) < 1e-9);
    CHECK(*after >= 0.0);
    CHECK(*after < 360.0);
}

TEST_CASE("At the zenith and at the pole the tube's top is not defined") {
    const SkyPoint zenith = icrs_from_hour_angle(kSite, 0.0, kSite.latitude_deg, kDate);
    CHECK_FALSE(tube_top_deg(kSite, Mount::altaz, false, zenith, kDate));
    CHECK(tube_top_deg(kSite, Mount::equatorial, false, zenith, kDate));
    for (const double pole : {90.0, -90.0}) {
        const SkyPoint at_pole = icrs_from_hour_angle(kSite, 10.0, pole, kDate);
        CHECK_FALSE(tube_top_deg(kSite, Mount::equatorial, false, at_pole, kDate));
    }
    // A few arcseconds away both are defined again, and point the right way.
    const SkyPoint south = icrs_from_hour_angle(kSite, 0.0, kSite.latitude_deg - 0.01, kDate);
    const auto up = tube_top_deg(kSite, Mount::altaz, false, south, kDate);
    REQUIRE(up);
    CHECK(std::abs(turn(*up, 0.0)) < 0.5);
}

TEST_CASE("Standard coordinates grow to the east and to the north") {
    const SkyPoint boresight{359.9999, 40.0};
    const auto east = tangent_from_sky(boresight, {0.1, 40.0});
    const auto north = tangent_from_sky(boresight, {359.9999, 40.5});
    REQUIRE(east);
    REQUIRE(north);
    CHECK(east->xi_rad > 0.0);
    CHECK(std::abs(north->xi_rad) < 1e-15);
    // Gnomonic: a point at distance d on the meridian lies at tan d.
    CHECK(north->eta_rad == Approx(std::tan(0.5 * ERFA_DD2R)).epsilon(1e-13));
}

TEST_CASE("Projection and its inverse return the same direction everywhere, over RA 0 and poles") {
    // Double precision of angles up to 2 pi, amplified by 1 / cos(dec) in ra only.
    constexpr double kRounding_deg = 1e-11;
    for (const double dec : {-89.999, -45.0, 0.0, 60.0, 89.9999}) {
        for (const double ra : {0.0, 0.001, 123.0, 359.9999}) {
            const SkyPoint boresight{ra, dec};
            for (const TangentPoint offset :
                 {TangentPoint{0.0, 0.0}, {0.01, -0.02}, {-1e-6, 1e-6}, {-0.5, 0.7}}) {
                const SkyPoint point = sky_from_tangent(boresight, offset);
                CHECK(point.ra_deg >= 0.0);
                CHECK(point.ra_deg < 360.0);
                const auto back = tangent_from_sky(boresight, point);
                REQUIRE(back);
                CHECK(std::abs(back->xi_rad - offset.xi_rad) < kRounding_deg);
                CHECK(std::abs(back->eta_rad - offset.eta_rad) < kRounding_deg);
            }
        }
    }
}

TEST_CASE("A direction 90 degrees or more away has no standard coordinates") {
    CHECK(tangent_from_sky({10.0, 0.0}, {99.9, 0.0}));
    CHECK_FALSE(tangent_from_sky({10.0, 0.0}, {100.0001, 0.0}));
    CHECK_FALSE(tangent_from_sky({10.0, 20.0}, {190.0, -20.0}));
}

TEST_CASE("Separations and position angles hold on the textbook cases") {
    CHECK(separation_deg({0.0, 0.0}, {90.0, 0.0}) == Approx(90.0));
    CHECK(separation_deg({359.5, 0.0}, {0.5, 0.0}) == Approx(1.0));
    CHECK(position_angle_deg({10.0, 0.0}, {11.0, 0.0}) == Approx(90.0));
    CHECK(position_angle_deg({10.0, 0.0}, {9.0, 0.0}) == Approx(270.0));
    CHECK(position_angle_deg({10.0, 10.0}, {10.0, 9.0}) == Approx(180.0));
}

TEST_CASE("Airmass is one overhead, two at 30 degrees and 38 at the horizon") {
    // Kasten & Young 1989: about 38 at the horizon; elsewhere the secant, which exceeds the airmass
    // by 0.3 per cent at 30 degrees.
    CHECK(airmass(90.0) == Approx(1.0).margin(0.001));
    CHECK(airmass(30.0) == Approx(2.0).margin(0.007));
    CHECK(airmass(0.0) == Approx(38.0).margin(0.1));
}
