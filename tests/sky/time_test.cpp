#include "sky/time.h"

#include <catch2/catch.hpp>

using namespace straymark;

namespace {
// MJD in a double near 6e4 is spaced by 7e-12 day; ERFA works to 1e-12 day on the split date.
constexpr double kMjdRounding = 2e-11;
}  // namespace

TEST_CASE("TAI and TT become UTC as ERFA publishes") {
    // ERFA's own validation programme: taiutc(2453750.5, 0.892482639) =
    // 2453750.5 + 0.8921006945555555556; tttai(2453750.5, 0.892482639) = ... + 0.892110139.
    CHECK(utc_from_tai(53750.892482639).days ==
          Approx(53750.8921006945555556).margin(kMjdRounding).epsilon(0));
    CHECK(utc_from_tt(53750.892482639).days ==
          Approx(utc_from_tai(53750.892110139).days).margin(kMjdRounding).epsilon(0));
}

TEST_CASE("Leap seconds are those of the IERS") {
    // Bulletin C: TAI - UTC is 33 s in 2006, 37 s from 2017-01-01; TT - TAI is 32.184 s.
    CHECK(utc_from_tai(53750.5).days ==
          Approx(53750.5 - 33.0 / 86400).margin(kMjdRounding).epsilon(0));
    CHECK(utc_from_tt(60310.25).days ==
          Approx(60310.25 - 69.184 / 86400).margin(kMjdRounding).epsilon(0));
    CHECK(utc_from_mjd(60310.25, TimeScale::utc).days == 60310.25);
}

TEST_CASE("Dates become MJD, also on the day of a leap second") {
    // ERFA's validation programme: dtf2d("UTC", 1994, 6, 30, 23, 59, 60.13599) = 2449534.49999.
    const auto leap = utc_from_civil({1994, 6, 30, 23, 59, 60.13599}, TimeScale::utc);
    REQUIRE(leap);
    CHECK(leap->days == Approx(49533.99999).margin(1e-10).epsilon(0));
    // Julian Date 2460310.5 begins 2024 (Astronomical Almanac).
    CHECK(utc_from_civil({2024, 1, 1, 6, 0, 0.0}, TimeScale::utc)->days == 60310.25);
    CHECK(utc_from_civil({2024, 1, 1, 6, 0, 37.0}, TimeScale::tai)->days ==
          Approx(60310.25).margin(kMjdRounding).epsilon(0));
}

TEST_CASE("There is no second 60 without a leap second, and no 30 February") {
    CHECK_FALSE(utc_from_civil({2024, 1, 1, 23, 59, 60.5}, TimeScale::utc));
    CHECK_FALSE(utc_from_civil({2024, 2, 30, 0, 0, 0.0}, TimeScale::utc));
    CHECK_FALSE(utc_from_civil({2024, 1, 1, 24, 0, 0.0}, TimeScale::utc));
    CHECK_FALSE(utc_from_civil({1959, 12, 31, 0, 0, 0.0}, TimeScale::utc));
}
