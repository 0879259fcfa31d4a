#include "score/strengths.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <fmt/format.h>

namespace straymark::score {
namespace {

StrengthMatch match(const std::string& source, double truth, double ratio, double fraction) {
    return {"d1/a01", source, truth, ratio * truth, fraction * std::abs(ratio * truth)};
}

TEST_CASE("A pair's slope is the mean of its ratios weighted by their fractional errors") {
    // Weights 1 / 0.01^2 and 1 / 0.02^2, that is 4 to 1: (4 * 1.0 + 1.1) / 5 = 1.02.
    const Slope slope =
        pair_slope(std::vector{match("s", 100.0, 1.0, 0.01), match("s", -900.0, 1.1, 0.02)});
    CHECK(slope.value == Approx(1.02));
    CHECK(slope.groups == 2);
    // One coefficient's error is common to all: (4 * 0.01 + 0.02) / 5, not smaller.
    CHECK(slope.error == Approx(0.012));
}

TEST_CASE("Errors smaller than the floor, or none, do not rule") {
    const Slope slope =
        pair_slope(std::vector{match("s", 100.0, 1.0, 0.0), match("s", 100.0, 2.0, 0.0)});
    CHECK(slope.value == Approx(1.5));
    CHECK(slope.error == Approx(kSmallestFraction));
}

TEST_CASE("Pairs are independent: two of one error give it over sqrt(2)") {
    const Slope slope =
        slope_over_pairs(std::vector{match("s", 100.0, 0.99, 0.02), match("t", 100.0, 1.01, 0.02)});
    CHECK(slope.value == Approx(1.0).margin(1e-6));
    CHECK(slope.pairs == 2);
    // The biweight takes a little off both: (1 - (0.5 / 4.685)^2)^2 = 0.977 of the weight.
    CHECK(slope.error == Approx(0.02 / std::sqrt(2.0 * 0.977)).epsilon(0.002));
}

TEST_CASE("One wrong pair among many does not move the slope; its own slope shows it") {
    std::vector<StrengthMatch> matches;
    for (int i = 0; i < 20; ++i) {
        matches.push_back(
            match(fmt::format("s{}", i), 50.0 * (i + 1), i % 2 == 0 ? 0.99 : 1.01, 0.02));
    }
    matches.push_back(match("wrong", 500.0, -1.0, 0.02));
    CHECK(slope_over_pairs(matches).value == Approx(1.0).margin(0.002));
    CHECK(pair_slope(by_pair(matches).at({"d1/a01", "wrong"})).value == Approx(-1.0));
}

TEST_CASE("Scatter beyond the stated errors widens the slope's error") {
    std::vector<StrengthMatch> matches;
    for (int i = 0; i < 40; ++i) {
        matches.push_back(match(fmt::format("s{}", i), 100.0, i % 2 == 0 ? 0.8 : 1.2, 0.01));
    }
    const Slope slope = slope_over_pairs(matches);
    CHECK(slope.value == Approx(1.0).margin(0.1));
    CHECK(slope.error > 0.2 / std::sqrt(40.0));
}

TEST_CASE("Nothing to compare has no slope") {
    CHECK(std::isnan(slope_over_pairs({}).value));
    CHECK(std::isnan(pulls_of({}).rms));
}

TEST_CASE("Pulls are differences in units of the stated errors") {
    const std::vector<StrengthMatch> matches = {
        {"v", "s", 100.0, 103.0, 1.0}, {"v", "s", -50.0, -51.0, 1.0}, {"v", "s", 5.0, 9.0, 0.0}};
    const Pulls pulls = pulls_of(matches);
    CHECK(pulls.count == 2);  // the one without an error says nothing
    CHECK(pulls.mean == Approx(1.0));
    CHECK(pulls.rms == Approx(std::sqrt(5.0)));
}

}  // namespace
}  // namespace straymark::score
