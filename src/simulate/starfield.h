#pragma once

#include <cstdint>
#include <vector>

#include "simulate/scenario.h"

namespace straymark::simulate {

/// Stars per square degree brighter than `mag` (V), mean of the whole sky. Log-linear between the
/// published counts (docs/methods/simulator.md), and beyond them.
double stars_per_square_degree(double mag);

/// The inverse: the magnitude brighter than which there are `per_square_degree` stars.
double magnitude_at_density(double per_square_degree);

struct SkyStar {
    Vec3 towards;
    double mag = 0.0;
};

/// All stars of one field, brightest first: those of the file as far as it is complete, then made
/// up ones, placed at random, in the numbers of the counts scaled so that they join the file's own.
/// `bright`: the file's content. `field`: its index, for the random stream.
std::vector<SkyStar> make_field(const Scenario& scenario, int field,
                                const std::vector<SkyStar>& bright);

/// The ratio of a field's own counts to the mean sky's, at its completeness limit.
double density_ratio(const FieldPlan& field, const std::vector<SkyStar>& bright);

/// A star as the list knows it, which is not quite where and how bright it is.
struct ListedStar {
    double ra_deg = 0.0;
    double dec_deg = 0.0;
    double mag = 0.0;
};

/// The list that the predictor is given: stars down to the listed limit, with the list's errors.
std::vector<ListedStar> list_field(const Scenario& scenario, int field,
                                   const std::vector<SkyStar>& stars);

}  // namespace straymark::simulate
