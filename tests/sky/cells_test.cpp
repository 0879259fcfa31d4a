#include "sky/cells.h"

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <random>

#include "sky/projection.h"

using namespace straymark;

namespace {

constexpr double kRadians = M_PI / 180.0;

/// A place at random in a disc, half of them within a thousandth of its rim.
SkyPoint somewhere_in(SkyPoint centre, double radius_deg, std::mt19937& random) {
    std::uniform_real_distribution<double> unit(0.0, 1.0);
    const double distance =
        radius_deg * (unit(random) < 0.5 ? 1.0 - 1e-3 * unit(random) : std::sqrt(unit(random)));
    const double angle = 2.0 * M_PI * unit(random);
    const double t = std::tan(distance * kRadians);
    return sky_from_tangent(centre, {t * std::sin(angle), t * std::cos(angle)});
}

}  // namespace

TEST_CASE("A cell's centre lies in that cell") {
    const SkyCells cells(0.15);
    for (std::int32_t cell = 0; cell < cells.count(); cell += 977) {
        CHECK(cells.cell(cells.centre(cell)) == cell);
    }
    CHECK(cells.cell({0.0, -90.0}) == 0);
    CHECK(cells.cell({359.999999, 90.0}) == cells.count() - 1);
}

TEST_CASE("Cells are as many as the sky's area asks for") {
    // 41252.96 square degrees; rounding each zone to whole cells costs a few in a thousand.
    CHECK(SkyCells(0.15).count() == Approx(41252.96 / (0.15 * 0.15)).epsilon(0.002));
}

TEST_CASE("Every place of a disc lies in a touched cell, at the poles and over RA 0 too") {
    std::mt19937 random(7);
    const SkyCells cells(0.15);
    for (const SkyPoint centre : {SkyPoint{10.0, 0.0},
                                  {0.01, 45.0},
                                  {359.95, -60.0},
                                  {0.0, 89.7},
                                  {77.0, 90.0},
                                  {200.0, -90.0},
                                  {15.0, -89.2},
                                  {180.0, 88.0}}) {
        for (const double radius_deg : {0.01, 0.4, 1.0, 5.0}) {
            const auto spans = cells.touched(centre, radius_deg);
            for (std::size_t i = 1; i < spans.size(); ++i) {
                CHECK(spans[i - 1].end <= spans[i].first);
            }
            for (int i = 0; i < 200; ++i) {
                const std::int32_t cell = cells.cell(somewhere_in(centre, radius_deg, random));
                CHECK(std::any_of(spans.begin(), spans.end(), [cell](const SkyCells::Span& span) {
                    return cell >= span.first && cell < span.end;
                }));
            }
        }
    }
}

TEST_CASE("A small disc touches few cells") {
    const SkyCells cells(0.15);
    std::int32_t touched = 0;
    for (const SkyCells::Span& span : cells.touched({120.0, 50.0}, 0.5)) {
        touched += span.end - span.first;
    }
    // A square of 1.0 degree (44 cells) with a border of one cell on each side.
    CHECK(touched < 90);
}
