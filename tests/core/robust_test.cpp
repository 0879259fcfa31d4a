#include "core/robust.h"

#include <algorithm>
#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <limits>
#include <random>
#include <vector>

using namespace straymark;

namespace {

constexpr float kNan = std::numeric_limits<float>::quiet_NaN();

/// A sky: normal core of a given location and scale, with stars on a fraction of the pixels.
struct Sky {
    double location = 1000.3;
    double scale = 5.0;
    double star_fraction = 0.0;
    double star_scales = 20.0;  ///< mean height of the stars' pixels, in scales
    double quantum = 0.0;       ///< values are rounded to multiples; 0: they are not
    std::size_t count = 1000000;
};

std::vector<float> pixels_of(const Sky& sky, unsigned seed) {
    std::mt19937 generator(seed);
    std::normal_distribution<double> noise(sky.location, sky.scale);
    std::exponential_distribution<double> star(1.0 / (sky.star_scales * sky.scale));
    std::bernoulli_distribution has_star(sky.star_fraction);
    std::vector<float> pixels(sky.count);
    for (float& pixel : pixels) {
        double value = noise(generator);
        if (has_star(generator)) {
            value += star(generator);
        }
        if (sky.quantum > 0.0) {
            value = std::round(value / sky.quantum) * sky.quantum;
        }
        pixel = static_cast<float>(value);
    }
    return pixels;
}

/// The promise (1 % of the scale) and four standard errors of the mean of 65,536 values.
constexpr double kPromised = 0.01;
const double kFourErrors = 4.0 / std::sqrt(65536.0);

void check_core_of(const Sky& sky, unsigned seed) {
    INFO("scale " << sky.scale << ", quantum " << sky.quantum << ", stars " << sky.star_fraction
                  << " of " << sky.star_scales << " scales");
    const RobustStats stats = clipped_normal(pixels_of(sky, seed));
    CHECK(std::abs(stats.location - sky.location) < (kPromised + kFourErrors) * sky.scale);
    CHECK(std::abs(stats.scale / sky.scale - 1.0) < kPromised + kFourErrors / std::sqrt(2.0));
}

}  // namespace

TEST_CASE("the median is the middle value, or the mean of the middle two") {
    std::vector<double> odd{5, 1, 4, 2, 3};
    CHECK(median_in_place(odd) == 3.0);
    std::vector<float> even{9, 1, 4, 2};
    CHECK(median_in_place(even) == 3.0);
    std::vector<float> one{7};
    CHECK(median_in_place(one) == 7.0);
    std::vector<float> two{-1, 2};
    CHECK(median_in_place(two) == 0.5);
}

TEST_CASE("Huber's location leaves an outlier no more pull than k scales") {
    // By hand: five values within reach and one beyond: 5 mu = 1.345.
    const std::array<double, 6> values{-.2, -.1, 0, .1, .2, 10};
    CHECK(huber_location(values, 1.0) == Approx(0.269).margin(1e-14));
    // Mirrored, the pull is mirrored.
    const std::array<double, 6> mirrored{-.2, -.1, 0, .1, .2, -10};
    CHECK(huber_location(mirrored, 1.0) == Approx(-0.269).margin(1e-14));
}

TEST_CASE("Huber's location solves its estimating equation on any sample") {
    std::mt19937 generator(3);
    std::cauchy_distribution<double> heavy_tailed;
    for (int trial = 0; trial < 200; ++trial) {
        std::vector<double> values(1 + static_cast<std::size_t>(trial) % 40);
        std::generate(values.begin(), values.end(), [&] { return heavy_tailed(generator); });
        const double location = huber_location(values, 0.5);
        double pull = 0.0;
        double size = 0.0;
        for (const double value : values) {
            pull += std::clamp(value - location, -1.345 * 0.5, 1.345 * 0.5);
            size = std::max(size, std::abs(value));
        }
        // The pull changes by at most one per value and unit of location; location is rounded.
        const double rounding = 1e-15 * size * static_cast<double>(values.size());
        CHECK(std::abs(pull) <= 1e-12 + 4.0 * rounding);
    }
}

TEST_CASE("Huber's location with a large k is the mean, and of equal values that value") {
    const std::array<double, 4> values{1, 2, 3, 10};
    CHECK(huber_location(values, 1.0, 100.0) == Approx(4.0).epsilon(1e-14));
    const std::array<double, 3> equal{2.5, 2.5, 2.5};
    CHECK(huber_location(equal, 1.0) == 2.5);
}

TEST_CASE("the biweight ignores what lies beyond its reach and uses the MAD as scale") {
    // Median 3, MAD 1 (deviations 2 1 0 1 2 and 997): by hand the far value has no weight, and
    // the other five are symmetric about 3.
    const std::array<double, 5> symmetric{1, 2, 3, 4, 5};
    const RobustStats plain = biweight(symmetric);
    CHECK(plain.location == Approx(3.0).epsilon(1e-14));
    CHECK(plain.scale == Approx(1.482602218505602).epsilon(1e-14));
    CHECK(plain.count == 5);

    const std::array<double, 8> contaminated{1, 2, 3,    4,
                                             5, 3, 1000, std::numeric_limits<double>::quiet_NaN()};
    const RobustStats robust = biweight(contaminated);
    CHECK(robust.location == Approx(3.0).epsilon(1e-14));
    CHECK(robust.count == 7);
}

TEST_CASE("the biweight's location solves Tukey's estimating equation") {
    const std::array<double, 7> values{0.3, -1.1, 0.8, 2.4, 6.0, -0.2, 0.1};
    const RobustStats stats = biweight(values);
    // An independent method: the sign change of sum psi next to the median (0.3), MAD 0.5.
    const double reach = 4.685 * 1.482602218505602 * 0.5;
    const auto pull = [&](double at) {
        double sum = 0.0;
        for (const double value : values) {
            const double z = (value - at) / reach;
            sum += std::abs(z) < 1.0 ? z * (1.0 - z * z) * (1.0 - z * z) : 0.0;
        }
        return sum;
    };
    double low = 0.0;
    double high = 1.0;
    REQUIRE(pull(low) > 0.0);
    REQUIRE(pull(high) < 0.0);
    for (int i = 0; i < 60; ++i) {
        const double middle = 0.5 * (low + high);
        (pull(middle) > 0.0 ? low : high) = middle;
    }
    CHECK(stats.location == Approx(low).margin(1e-10));
    CHECK(stats.scale == Approx(1.482602218505602 * 0.5).epsilon(1e-12));
}

TEST_CASE("the biweight of nothing says so, of equal values has scale zero") {
    const std::array<double, 1> nothing{std::numeric_limits<double>::infinity()};
    CHECK(biweight(nothing).count == 0);
    CHECK(std::isnan(biweight(nothing).location));
    const std::array<double, 3> equal{4, 4, 4};
    CHECK(biweight(equal).location == 4.0);
    CHECK(biweight(equal).scale == 0.0);
}

TEST_CASE("the sky under 5 % of stars is found to 1 % of its noise") {
    unsigned seed = 1;
    for (const double star_scales : {3.0, 5.0, 20.0, 100.0, 3000.0}) {
        check_core_of({.star_fraction = 0.05, .star_scales = star_scales}, seed++);
    }
    check_core_of({.star_fraction = 0.0}, seed);
}

TEST_CASE("a crowded field with stars on a third of its pixels keeps its sky") {
    check_core_of({.star_fraction = 0.33, .star_scales = 100.0}, 30);
}

TEST_CASE("whole-number pixels give the same sky as unrounded ones") {
    unsigned seed = 20;
    // Sheppard: rounding adds a variance of quantum^2 / 12, which the binned fit must not see.
    for (const double scale : {0.7, 1.0, 1.5, 3.0, 8.3, 40.0}) {
        check_core_of({.scale = scale, .star_fraction = 0.05, .star_scales = 20.0, .quantum = 1.0},
                      seed++);
    }
    // Below 0.6 of a step three values hold the core, too few to tell a tail from it.
    check_core_of({.location = -0.2, .scale = 0.4, .quantum = 1.0}, seed++);
    check_core_of({.location = 1000.3, .scale = 0.5, .quantum = 1.0}, seed);
}

TEST_CASE("a level subtracted from whole-number pixels shifts the sky by that level") {
    std::vector<float> pixels =
        pixels_of({.scale = 2.0, .star_fraction = 0.03, .quantum = 1.0}, 40);
    const RobustStats raw = clipped_normal(pixels);
    for (float& pixel : pixels) {
        pixel -= 987.654F;
    }
    const RobustStats shifted = clipped_normal(pixels);
    // float keeps 1000 to 6e-5; bins then move by a hundredth of a step at most.
    CHECK(shifted.location == Approx(raw.location - 987.654).margin(0.01));
    CHECK(shifted.scale == Approx(raw.scale).epsilon(0.005));
}

TEST_CASE("dark outliers do not move the sky either") {
    std::vector<float> pixels = pixels_of({.star_fraction = 0.03}, 50);
    for (std::size_t i = 0; i < pixels.size(); i += 97) {
        pixels[i] = -500.0F;
    }
    const RobustStats stats = clipped_normal(pixels);
    CHECK(std::abs(stats.location - 1000.3) < (kPromised + kFourErrors) * 5.0);
    CHECK(std::abs(stats.scale / 5.0 - 1.0) < kPromised + kFourErrors);
}

TEST_CASE("pixels without a value are left out and counted out") {
    std::vector<float> pixels = pixels_of({.count = 1000}, 60);
    const RobustStats before = clipped_normal(pixels);
    std::vector<float> with_gaps;
    for (const float pixel : pixels) {
        with_gaps.insert(with_gaps.end(), {pixel, kNan});
    }
    with_gaps.push_back(std::numeric_limits<float>::infinity());
    const RobustStats after = clipped_normal(with_gaps);
    CHECK(before.count == 1000);
    CHECK(after.count == 1000);
    CHECK(after.location == before.location);
    CHECK(after.scale == before.scale);
}

TEST_CASE("samples that hold no sky give finite answers") {
    CHECK(clipped_normal({}).count == 0);
    CHECK(std::isnan(clipped_normal({}).location));

    const std::vector<float> constant(5000, 65535.0F);
    CHECK(clipped_normal(constant).location == 65535.0);
    CHECK(clipped_normal(constant).scale == 0.0);

    const std::vector<float> single{3.0F};
    CHECK(clipped_normal(single).location == 3.0);

    std::vector<float> two_levels(4000, 1.0F);
    std::fill(two_levels.begin(), two_levels.begin() + 2000, 1e30F);
    std::vector<float> ramp(5000);
    for (std::size_t i = 0; i < ramp.size(); ++i) {
        ramp[i] = static_cast<float>(i);
    }
    const std::vector<float> extremes{-3e38F, 3e38F, 0.0F, 1e-38F};
    for (const std::vector<float>& sample : {two_levels, ramp, extremes}) {
        const RobustStats stats = clipped_normal(sample);
        CHECK(std::isfinite(stats.location));
        CHECK(std::isfinite(stats.scale));
        CHECK(stats.scale >= 0.0);
    }
}

TEST_CASE("a sample that is more than half one value has the scale of the rest") {
    // 60 % of whole-number pixels of a 0.6-step noise share one value: their MAD is zero.
    check_core_of({.location = 0.0, .scale = 0.6, .quantum = 1.0, .count = 300000}, 70);
}
