#include "simulate/starlight.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <numbers>

namespace straymark::simulate {
namespace {

/// By a midpoint rule of 41 x 41 points in the pixel: error 2e-4 of the second derivative over 24.
double by_brute_force(double fwhm, double beta, double ellipticity, double axis_angle,
                      Vec2 offset) {
    constexpr int kPoints = 41;
    const double alpha = fwhm / (2.0 * std::sqrt(std::pow(2.0, 1.0 / beta) - 1.0));
    double sum = 0.0;
    for (int j = 0; j < kPoints; ++j) {
        for (int i = 0; i < kPoints; ++i) {
            const double x = offset.x + (i + 0.5) / kPoints - 0.5;
            const double y = offset.y + (j + 0.5) / kPoints - 0.5;
            const double along = (x * std::cos(axis_angle) + y * std::sin(axis_angle)) *
                                 std::sqrt(1.0 - ellipticity) / alpha;
            const double across = (y * std::cos(axis_angle) - x * std::sin(axis_angle)) /
                                  std::sqrt(1.0 - ellipticity) / alpha;
            sum += std::pow(1.0 + along * along + across * across, -beta);
        }
    }
    return sum * (beta - 1.0) / (std::numbers::pi * alpha * alpha) / (kPoints * kPoints);
}

}  // namespace

TEST_CASE("pixels hold the integral of the Moffat profile") {
    const double angle = 0.6;
    const PointSpread spread(2.4, 3.0, 0.2, {std::cos(angle), std::sin(angle)});
    const double peak = by_brute_force(2.4, 3.0, 0.2, angle, {0, 0});
    for (const Vec2 offset : {Vec2{0, 0}, Vec2{0.5, 0.5}, Vec2{-1.3, 0.2}, Vec2{2, -3},
                              Vec2{0, 5.9}, Vec2{7, 7}, Vec2{-20, 14}, Vec2{30, 5}}) {
        const double expected = by_brute_force(2.4, 3.0, 0.2, angle, offset);
        CHECK(std::fabs(spread.in_pixel(offset) - expected) < 5e-5 * peak);
        CHECK(spread.in_pixel(offset) == Approx(expected).epsilon(2e-3));
    }
}

TEST_CASE("a star's light is all there but for the wings beyond its reach") {
    const PointSpread spread(2.9, 3.0, 0.0, {1, 0});
    StarImage star{{60.3, 59.8}, 1e6, 0.0};
    star.reach_px = spread.reach_px(star.light_e, 0.2);
    std::vector<float> light(120 * 120, 0.0F);
    paint_stars({&star, 1}, spread, 120, 0, 120, light);
    double sum = 0.0;
    for (const float value : light) {
        sum += static_cast<double>(value);
    }
    // Beyond r a Moffat profile of beta 3 holds (1 + (r / alpha)^2)^-2 of its light.
    const double alpha = 2.9 / (2.0 * std::sqrt(std::cbrt(2.0) - 1.0));
    const double outside = std::pow(1.0 + std::pow(star.reach_px / alpha, 2.0), -2.0);
    CHECK(sum / 1e6 == Approx(1.0 - outside).margin(2e-4));
    CHECK(outside < 0.01);
    double at_edge = 0.0;
    for (int x = 0; x < 120; ++x) {
        at_edge = std::max(at_edge, static_cast<double>(light[x]));
    }
    CHECK(at_edge == 0.0);
}

TEST_CASE("rows painted apart are those painted together") {
    const PointSpread spread(2.9, 3.0, 0.1, {0.6, 0.8});
    const std::vector<StarImage> stars{{{10.2, 7.7}, 5e5, 40.0}, {{30.0, 20.0}, 2e4, 12.0}};
    std::vector<float> whole(50 * 40, 0.0F);
    std::vector<float> parts(50 * 40, 0.0F);
    paint_stars(stars, spread, 50, 0, 40, whole);
    for (int first = 0; first < 40; first += 8) {
        paint_stars(stars, spread, 50, first, first + 8, parts);
    }
    CHECK(whole == parts);
}

}  // namespace straymark::simulate
