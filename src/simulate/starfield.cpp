#include "simulate/starfield.h"

#include <algorithm>
#include <array>
#include <cmath>

#include "core/random.h"
#include "simulate/streams.h"
#include "simulate/telescope.h"

namespace straymark::simulate {
namespace {

struct Count {
    double mag;
    double per_square_degree;
};
// Bright end: direct count of the Hipparcos and Tycho list; 12: Tycho-2 (Hog et al. 2000, A&A 355,
// L27); beyond: all-sky mean.
constexpr std::array<Count, 11> kCounts{{{3.0, 0.0042},
                                         {5.0, 0.039},
                                         {6.0, 0.121},
                                         {7.0, 0.373},
                                         {8.0, 0.996},
                                         {9.0, 3.05},
                                         {12.0, 62.0},
                                         {14.0, 320.0},
                                         {16.0, 1519.0},
                                         {18.0, 5728.0},
                                         {20.0, 16596.0}}};

constexpr double kSquareDegreesInSteradian =
    (180.0 / std::numbers::pi) * (180.0 / std::numbers::pi);

double cap_square_degrees(double radius_deg) {
    return 2.0 * std::numbers::pi * (1.0 - std::cos(radians(radius_deg))) *
           kSquareDegreesInSteradian;
}

/// A place drawn evenly within `radius_deg` of `centre`.
Vec3 place_in_cap(RandomStream& stream, Vec3 centre, double radius_deg) {
    const double lowest = std::cos(radians(radius_deg));
    const double c = 1.0 - stream.uniform() * (1.0 - lowest);
    const double s = std::sqrt(std::max(0.0, 1.0 - c * c));
    const double angle = 2.0 * std::numbers::pi * stream.uniform();
    const Vec3 east = unit(cross(kPole, centre));
    const Vec3 north = cross(centre, east);
    return c * centre + s * std::cos(angle) * north + s * std::sin(angle) * east;
}

bool within(Vec3 a, Vec3 b, double radius_deg) {
    return dot(a, b) >= std::cos(radians(radius_deg));
}

}  // namespace

double stars_per_square_degree(double mag) {
    std::size_t i = 1;
    while (i + 1 < kCounts.size() && mag > kCounts[i].mag) {
        ++i;
    }
    const Count& a = kCounts[i - 1];
    const Count& b = kCounts[i];
    const double slope = std::log(b.per_square_degree / a.per_square_degree) / (b.mag - a.mag);
    return a.per_square_degree * std::exp(slope * (mag - a.mag));
}

double magnitude_at_density(double per_square_degree) {
    std::size_t i = 1;
    while (i + 1 < kCounts.size() && per_square_degree > kCounts[i].per_square_degree) {
        ++i;
    }
    const Count& a = kCounts[i - 1];
    const Count& b = kCounts[i];
    const double slope = (b.mag - a.mag) / std::log(b.per_square_degree / a.per_square_degree);
    return a.mag + slope * std::log(per_square_degree / a.per_square_degree);
}

double density_ratio(const FieldPlan& field, const std::vector<SkyStar>& bright) {
    const Vec3 centre = direction(field.ra_deg, field.dec_deg);
    const auto count = std::count_if(bright.begin(), bright.end(), [&](const SkyStar& star) {
        return star.mag < field.complete_mag &&
               within(star.towards, centre, field.stars_radius_deg);
    });
    return static_cast<double>(count) / (cap_square_degrees(field.stars_radius_deg) *
                                         stars_per_square_degree(field.complete_mag));
}

std::vector<SkyStar> make_field(const Scenario& scenario, int field,
                                const std::vector<SkyStar>& bright) {
    const FieldPlan& plan = scenario.fields[field];
    const Vec3 centre = direction(plan.ra_deg, plan.dec_deg);
    std::vector<SkyStar> stars;
    for (const SkyStar& star : bright) {
        if (star.mag < plan.complete_mag && within(star.towards, centre, plan.radius_deg)) {
            stars.push_back(star);
        }
    }
    const double nearest = stars_per_square_degree(plan.complete_mag);
    const double farthest = stars_per_square_degree(scenario.star_list.faintest_simulated_mag);
    RandomStream stream(scenario.seed, stream_of(Purpose::field, field));
    const double made_up =
        stream.poisson(density_ratio(plan, bright) * cap_square_degrees(plan.radius_deg) *
                       std::max(0.0, farthest - nearest));
    stars.reserve(stars.size() + static_cast<std::size_t>(made_up));
    for (double n = 0.0; n < made_up; n += 1.0) {
        const Vec3 towards = place_in_cap(stream, centre, plan.radius_deg);
        const double density = nearest + (farthest - nearest) * stream.uniform();
        stars.push_back({towards, magnitude_at_density(density)});
    }
    std::stable_sort(stars.begin(), stars.end(),
                     [](const SkyStar& a, const SkyStar& b) { return a.mag < b.mag; });
    return stars;
}

std::vector<ListedStar> list_field(const Scenario& scenario, int field,
                                   const std::vector<SkyStar>& stars) {
    const StarListPlan& plan = scenario.star_list;
    RandomStream stream(scenario.seed, stream_of(Purpose::listing, field));
    std::vector<ListedStar> listed;
    for (const SkyStar& star : stars) {
        if (star.mag > plan.faintest_listed_mag) {
            break;
        }
        const Vec2 error{plan.position_error_arcsec * stream.normal(),
                         plan.position_error_arcsec * stream.normal()};
        const Equatorial place = equatorial(nudged(star.towards, error));
        listed.push_back(
            {place.ra_deg, place.dec_deg, star.mag + plan.magnitude_error * stream.normal()});
    }
    return listed;
}

}  // namespace straymark::simulate
