#include "exposure/star_match.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <random>

using namespace straymark;

namespace {

std::vector<FocalPoint> scattered(int count, std::mt19937& random) {
    std::uniform_real_distribution<double> place(-30.0, 30.0);
    std::vector<FocalPoint> out;
    for (int i = 0; i < count; ++i) {
        out.push_back({place(random), place(random)});
    }
    return out;
}

/// Poisson probability of `count` or more, summed term by term.
double poisson_tail(int count, double mean) {
    double term = std::exp(-mean);
    double below = 0.0;
    for (int k = 0; k < count; ++k) {
        below += term;
        term *= mean / (k + 1);
    }
    return 1.0 - below;
}

}  // namespace

TEST_CASE("A motion turns counter-clockwise, then shifts, and can be undone") {
    const PlaneMotion motion{M_PI / 2.0, 10.0, 20.0};
    const FocalPoint moved = motion.applied({1.0, 0.0});
    CHECK(moved.x_mm == Approx(10.0));
    CHECK(moved.y_mm == Approx(21.0));
    const FocalPoint back = motion.undone(moved);
    CHECK(back.x_mm == Approx(1.0));
    CHECK(back.y_mm == Approx(0.0).margin(1e-12));
}

TEST_CASE("Least squares finds the motion that made the pairs") {
    std::mt19937 random(3);
    const std::vector<FocalPoint> expected = scattered(20, random);
    const PlaneMotion truth{-0.013, 0.4, -0.7};
    std::vector<FocalPoint> measured;
    std::vector<StarPair> pairs;
    for (int i = 0; i < 20; ++i) {
        measured.push_back(truth.applied(expected[static_cast<std::size_t>(i)]));
        pairs.push_back({i, i, 0.0});
    }
    const PlaneMotion found = fitted_motion(measured, expected, pairs);
    CHECK(found.turn_rad == Approx(truth.turn_rad).margin(1e-14));
    CHECK(found.dx_mm == Approx(truth.dx_mm).margin(1e-13));
    CHECK(found.dy_mm == Approx(truth.dy_mm).margin(1e-13));
}

TEST_CASE("The vote comes within two bins of the motion, among as many false stars as true ones") {
    std::mt19937 random(5);
    const std::vector<FocalPoint> expected = scattered(40, random);
    const MotionRange range{3.0, 0.0105, 0.06};
    for (const PlaneMotion truth : {PlaneMotion{0.0087, 2.3, -1.9}, {-0.0087, -2.9, 0.1}, {}}) {
        std::vector<FocalPoint> measured = scattered(30, random);
        for (std::size_t i = 0; i < 30; ++i) {
            measured.push_back(truth.applied(expected[i]));
        }
        const auto found = voted_motion(measured, expected, range);
        REQUIRE(found);
        for (const FocalPoint corner : {FocalPoint{30.0, 30.0}, {-30.0, 30.0}, {0.0, 0.0}}) {
            const FocalPoint a = found->applied(corner);
            const FocalPoint b = truth.applied(corner);
            CHECK(std::hypot(a.x_mm - b.x_mm, a.y_mm - b.y_mm) <
                  2.0 * range.bin_mm * std::sqrt(2.0));
        }
    }
}

TEST_CASE("Pairs are mutual and within the radius") {
    const std::vector<FocalPoint> measured{{0.0, 0.0}, {1.0, 0.0}, {5.0, 5.0}};
    const std::vector<FocalPoint> expected{{0.1, 0.0}, {0.2, 0.0}, {1.05, 0.0}, {7.0, 5.0}};
    const auto pairs = nearest_pairs(measured, expected, 0.5);
    REQUIRE(pairs.size() == 2);
    CHECK(pairs[0].measured == 0);
    CHECK(pairs[0].expected == 0);
    CHECK(pairs[1].measured == 1);
    CHECK(pairs[1].expected == 2);
    CHECK(pairs[1].distance_mm == Approx(0.05));
}

TEST_CASE("The chance of coincidences is never understated, nor overstated without measure") {
    for (const double mean : {0.01, 0.5, 3.0, 20.0}) {
        for (const int count : {1, 5, 12, 30}) {
            const double exact = poisson_tail(count, mean);
            if (exact > 1e-10) {  // below, the sum has lost its digits
                CHECK(log_chance(count, mean) >= std::log(exact) - 1e-9);
            }
            if (exact > 1e-10 && count > mean) {
                // Chernoff's bound loses at most a factor of some sqrt(2 pi count).
                CHECK(log_chance(count, mean) < std::log(exact) + std::log(8.0 * std::sqrt(count)));
            }
        }
    }
}
