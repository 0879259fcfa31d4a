#include "simulate/starfield.h"

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>

#include "core/random.h"
#include "simulate/small_world.h"
#include "simulate/telescope.h"

namespace straymark::simulate {
namespace {

/// A list that follows the counts, `ratio` times as dense as the mean sky, complete to 12.
std::vector<SkyStar> bright_list(const FieldPlan& field, double ratio) {
    RandomStream stream(3, 3);
    const double area = 3.14159265 * field.stars_radius_deg * field.stars_radius_deg;
    const int count = static_cast<int>(ratio * area * stars_per_square_degree(12.0));
    std::vector<SkyStar> stars;
    for (int i = 0; i < count; ++i) {
        const double reach = 3600.0 * field.stars_radius_deg * std::sqrt(stream.uniform());
        const double angle = 6.283185307 * stream.uniform();
        stars.push_back({nudged(direction(field.ra_deg, field.dec_deg),
                                {reach * std::sin(angle), reach * std::cos(angle)}),
                         magnitude_at_density(stream.uniform() * stars_per_square_degree(12.0))});
    }
    return stars;
}

}  // namespace

TEST_CASE("counts are the published ones and rise smoothly between") {
    // Published counts: see docs/methods/simulator.md.
    CHECK(stars_per_square_degree(9.0) == Approx(3.05));
    CHECK(stars_per_square_degree(12.0) == Approx(62.0));
    CHECK(stars_per_square_degree(20.0) == Approx(16596.0));
    CHECK(stars_per_square_degree(13.0) == Approx(std::sqrt(62.0 * 320.0)));
    for (double mag = 2.0; mag < 22.0; mag += 0.1) {
        CHECK(stars_per_square_degree(mag + 0.1) > stars_per_square_degree(mag));
        CHECK(magnitude_at_density(stars_per_square_degree(mag)) == Approx(mag));
    }
}

TEST_CASE("made-up stars join the listed ones without a step") {
    Scenario scenario = small_scenario();
    FieldPlan& field = scenario.fields[0];
    field.stars_radius_deg = 3.0;
    field.radius_deg = 3.0;
    field.complete_mag = 11.0;
    scenario.star_list.faintest_simulated_mag = 14.0;
    const double ratio = 2.0;
    const std::vector<SkyStar> stars = make_field(scenario, 0, bright_list(field, ratio));
    const auto density = [&](double from, double to) {
        const auto count = std::count_if(stars.begin(), stars.end(), [&](const SkyStar& star) {
            return star.mag >= from && star.mag < to;
        });
        return static_cast<double>(count);
    };
    const double area = 3.14159265 * 9.0;
    for (const double mag : {9.0, 10.0, 10.5, 11.0, 11.5, 12.0, 13.0}) {
        const double expected =
            ratio * area * (stars_per_square_degree(mag + 0.5) - stars_per_square_degree(mag));
        // Counting noise, and the 2 % to which the list's own counts fix the scale.
        CHECK(std::fabs(density(mag, mag + 0.5) - expected) <
              5.0 * std::sqrt(expected) + 0.05 * expected);
    }
    CHECK(std::is_sorted(stars.begin(), stars.end(),
                         [](const SkyStar& a, const SkyStar& b) { return a.mag < b.mag; }));
}

TEST_CASE("all stars lie within the field, and evenly") {
    Scenario scenario = small_scenario();
    scenario.fields[0].radius_deg = 1.0;
    const Vec3 centre = direction(84.0, 28.0);
    const std::vector<SkyStar> stars =
        make_field(scenario, 0, bright_list(scenario.fields[0], 1.0));
    int inner = 0;
    for (const SkyStar& star : stars) {
        const double distance_deg = degrees(std::acos(std::min(1.0, dot(star.towards, centre))));
        REQUIRE(distance_deg <= 1.0 + 1e-9);
        inner += distance_deg < std::sqrt(0.5) ? 1 : 0;
    }
    const auto n = static_cast<double>(stars.size());
    CHECK(std::fabs(inner - 0.5 * n) < 5.0 * std::sqrt(0.25 * n));  // half of the area
}

TEST_CASE("the list stops at its limit and errs as much as it says") {
    Scenario scenario = small_scenario();
    scenario.star_list = {21.0, 19.0, 0.5, 0.1};
    const std::vector<SkyStar> stars =
        make_field(scenario, 0, bright_list(scenario.fields[0], 4.0));
    const std::vector<ListedStar> listed = list_field(scenario, 0, stars);
    REQUIRE(listed.size() > 500);
    CHECK(stars[listed.size() - 1].mag <= 19.0);
    CHECK(stars[listed.size()].mag > 19.0);
    double north = 0.0;
    double mags = 0.0;
    for (std::size_t i = 0; i < listed.size(); ++i) {
        north += std::pow((listed[i].dec_deg - equatorial(stars[i].towards).dec_deg) * 3600.0, 2.0);
        mags += std::pow(listed[i].mag - stars[i].mag, 2.0);
    }
    const auto n = static_cast<double>(listed.size());
    const double tolerance = 5.0 / std::sqrt(2.0 * n);  // relative, of a standard deviation
    CHECK(std::sqrt(north / n) == Approx(0.5).epsilon(tolerance));
    CHECK(std::sqrt(mags / n) == Approx(0.1).epsilon(tolerance));
}

}  // namespace straymark::simulate
