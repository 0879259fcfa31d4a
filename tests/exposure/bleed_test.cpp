#include <catch2/catch.hpp>
#include <cmath>
#include <set>

#include "exposure/measure.h"
#include "exposure/synthetic.h"

using namespace straymark;
using namespace straymark::test;

namespace {

using PixelSet = std::set<std::pair<int, int>>;  // (x, y)

constexpr double kFullWell = 120000.0;   // e; 61,000 ADU raw, above the saturation of 60,000
constexpr double kSaturated = 118000.0;  // e

PixelSet pixels_of(const std::vector<PixelRun>& runs) {
    PixelSet pixels;
    for (const PixelRun& run : runs) {
        for (int k = 0; k < run.length; ++k) {
            pixels.insert({run.x0 + k, run.y});
        }
    }
    return pixels;
}

/// Lets what exceeds the full well spill along the columns, half of it to either side.
/// along_y: columns run along y.
Field spilled(const Field& field, bool along_y) {
    Field out = field;
    const int columns = along_y ? field.width : field.height;
    const int length = along_y ? field.height : field.width;
    for (int c = 0; c < columns; ++c) {
        const auto well = [&](int v) -> double& { return along_y ? out.at(c, v) : out.at(v, c); };
        for (const int step : {-1, 1}) {
            double moving = 0.0;
            for (int v = step > 0 ? 0 : length - 1; v >= 0 && v < length; v += step) {
                const double before = along_y ? field.at(c, v) : field.at(v, c);
                moving += 0.5 * std::max(0.0, before - kFullWell);
                const double base = std::min(well(v), kFullWell);
                const double room = std::min(kFullWell - base, moving);
                well(v) = base + room;
                moving -= room;
            }
        }
    }
    return out;
}

struct BleedCase {
    PixelSet found;
    Field before, after;
};

BleedCase measure_bleed(const Camera& camera, const Field& before, bool along_y) {
    const Field after = spilled(before, along_y);
    MemoryFrame frame(camera, after, 5);
    return {pixels_of(measure_detector(camera, 0, frame, {}, 1).bleed), before, after};
}

/// Radius within which the star alone saturates.
double saturated_radius(const Field& before, int x, int y) {
    int r = 0;
    while (before.at(x + r, y) >= kSaturated) {
        ++r;
    }
    return r;
}

/// Every filled pixel beyond the core must be found; nothing may be that gained no charge.
void check_trail(const BleedCase& result, int star_x, int star_y, bool along_y) {
    const double radius = saturated_radius(result.before, star_x, star_y);
    const double core = std::max(1.25 * radius, radius + 2.0) + 1.0;  // the promise, and a pixel
    int expected = 0;
    for (int y = 0; y < result.before.height; ++y) {
        for (int x = 0; x < result.before.width; ++x) {
            const double gained = result.after.at(x, y) - result.before.at(x, y);
            const double along = along_y ? std::abs(y - star_y) : std::abs(x - star_x);
            const bool found = result.found.count({x, y}) == 1;
            if (result.after.at(x, y) >= kFullWell && gained > 0.0 && along > core) {
                ++expected;
                INFO("filled pixel " << x << ", " << y);
                CHECK(found);
            }
            if (found) {
                INFO("flagged pixel " << x << ", " << y);
                CHECK((gained > 0.0 || result.before.at(x, y) >= kSaturated));
            }
        }
    }
    CHECK(expected > 50);  // or the case tests nothing
}

}  // namespace

TEST_CASE("a saturated star that does not spill has no bleed") {
    const Camera camera = make_camera(256, 256, 1, 1);
    Field field(256, 256, 400.0);
    for (const double x : {40.0, 120.3, 200.5}) {
        add_star(field, x, 0.7 * x + 20.0, 5e6 * (x / 40.0), 4.0, 3.0, 60);
    }
    for (double& electrons : field.electrons) {
        electrons = std::min(electrons, kFullWell);
    }
    MemoryFrame frame(camera, field, 1);
    const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 1);
    CHECK(digest.amplifiers.front().saturated.size() > 15);
    CHECK(digest.bleed.empty());
}

TEST_CASE("charge spilled along the columns is bleed") {
    Field field(256, 256, 400.0);
    add_star(field, 120.2, 131.4, 4e7, 2.8, 3.0, 100);
    SECTION("on one amplifier") {
        check_trail(measure_bleed(make_camera(256, 256, 1, 1), field, true), 120, 131, true);
    }
    SECTION("across the border of two amplifiers read towards opposite ends") {
        const Camera camera =
            make_camera(256, 256, 1, 2, {Corner::lower_left, Corner::upper_right});
        check_trail(measure_bleed(camera, field, true), 120, 131, true);
    }
    SECTION("along x where rows are shifted out along y") {
        const Camera camera =
            make_camera(256, 256, 2, 1, {Corner::lower_right, Corner::upper_left}, SerialAxis::y);
        check_trail(measure_bleed(camera, field, false), 120, 131, false);
    }
}

TEST_CASE("the end of a trail that is only partly filled is bleed") {
    const Camera camera = make_camera(256, 256, 1, 1);
    Field field(256, 256, 400.0);
    add_star(field, 120.0, 130.0, 4e7, 2.8, 3.0, 100);
    const BleedCase result = measure_bleed(camera, field, true);
    int ends = 0;
    for (int x = 117; x <= 123; ++x) {
        for (int y = 1; y < 255; ++y) {
            const double gained = result.after.at(x, y) - result.before.at(x, y);
            const bool partly =
                result.after.at(x, y) < kSaturated && gained > 0.5 * result.before.at(x, y) + 500.0;
            if (partly && std::abs(y - 130) > 12) {
                ++ends;
                CHECK(result.found.count({x, y}) == 1);
            }
        }
    }
    CHECK(ends >= 4);
}

TEST_CASE("two stars on one trail keep a core each") {
    const Camera camera = make_camera(256, 256, 1, 1);
    Field field(256, 256, 400.0);
    add_star(field, 120.0, 90.0, 1e8, 5.0, 3.0, 100);
    add_star(field, 121.0, 165.0, 8e7, 5.0, 3.0, 100);
    const BleedCase result = measure_bleed(camera, field, true);
    REQUIRE(result.after.at(120, 128) >= kSaturated);  // their trails meet
    CHECK(result.found.count({120, 128}) == 1);
    CHECK(result.found.count({120, 90}) == 0);
    CHECK(result.found.count({121, 165}) == 0);
}

TEST_CASE("a row filled along the register does not turn a trail into a core") {
    const Camera camera = make_camera(256, 256, 1, 1);
    Field field(256, 256, 400.0);
    for (int x = 20; x < 230; ++x) {
        field.at(x, 0) = kFullWell;
    }
    add_star(field, 120.0, 60.0, 4e7, 2.8, 3.0, 100);
    const BleedCase result = measure_bleed(camera, field, true);
    REQUIRE(result.after.at(120, 25) >= kSaturated);
    CHECK(result.found.count({120, 25}) == 1);
}
