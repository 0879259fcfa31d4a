#include "simulate/charge.h"

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <numeric>

#include "simulate/small_world.h"

namespace straymark::simulate {
namespace {

Chip small_chip() {
    return build_instrument(small_scenario()).chips.front();  // 96 x 64, full well 120,000
}

double total(const Image& image) {
    return std::accumulate(image.begin(), image.end(), 0.0);
}

Image dark_with(const Chip& chip, int x, int y, float charge) {
    Image image(static_cast<std::size_t>(chip.width) * chip.height, 400.0F);
    image[static_cast<std::size_t>(y) * chip.width + x] = charge;
    return image;
}

// Single precision: 24 bits over some tens of pixels of 1e5 electrons.
constexpr double kRounding = 1e-6;

}  // namespace

TEST_CASE("bleeding charge goes both ways along its column, and none is lost") {
    const Chip chip = small_chip();
    Image image = dark_with(chip, 40, 30, 1.0e6F);
    const double before = total(image);
    CHECK(bleed(chip, image) == 0.0);
    CHECK(total(image) == Approx(before).epsilon(kRounding));
    CHECK(*std::max_element(image.begin(), image.end()) <= 120000.0F);
    int up = 0;
    int down = 0;
    for (int y = 0; y < chip.height; ++y) {
        for (int x = 0; x < chip.width; ++x) {
            const float value = image[static_cast<std::size_t>(y) * chip.width + x];
            if (value != 400.0F) {
                CHECK(x == 40);
                up += y > 30 ? 1 : 0;
                down += y < 30 ? 1 : 0;
            }
        }
    }
    // 880,000 electrons of excess fill 3.68 pixels to each side.
    CHECK(up == 4);
    CHECK(down == 4);
}

TEST_CASE("bleeding charge turns back at the detector's edge") {
    const Chip chip = small_chip();
    Image image = dark_with(chip, 40, 62, 2.0e6F);
    const double before = total(image);
    CHECK(bleed(chip, image) == 0.0);
    CHECK(total(image) == Approx(before).epsilon(kRounding));
    CHECK(image[63 * 96 + 40] == 120000.0F);
    CHECK(image[50 * 96 + 40] == 120000.0F);  // down to where a one-sided flow would end
}

TEST_CASE("a full column loses the rest and says how much") {
    const Chip chip = small_chip();
    Image image = dark_with(chip, 40, 30, 1.0e7F);
    const double before = total(image);
    const double lost = bleed(chip, image);
    CHECK(lost > 0.0);
    CHECK(total(image) + lost == Approx(before).epsilon(kRounding));
}

TEST_CASE("charge below full well stays where it is") {
    const Chip chip = small_chip();
    Image image = dark_with(chip, 40, 30, 119999.0F);
    const Image before = image;
    CHECK(bleed(chip, image) == 0.0);
    CHECK(image == before);
}

TEST_CASE("two wells on one column share it without a hole or an overflow") {
    const Chip chip = small_chip();
    Image image = dark_with(chip, 40, 30, 1.5e6F);
    image[34 * 96 + 40] = 1.5e6F;
    const double before = total(image);
    CHECK(bleed(chip, image) == 0.0);
    CHECK(total(image) == Approx(before).epsilon(kRounding));
    CHECK(*std::max_element(image.begin(), image.end()) <= 120000.0F);
    for (int y = 30; y <= 34; ++y) {
        CHECK(image[y * 96 + 40] == 120000.0F);
    }
}

TEST_CASE("photon noise has the mean, variance and skewness of the Poisson law") {
    const double mean = GENERATE(5.0, 99.0, 101.0, 400.0, 20000.0);
    const Illumination what{9, 1, 0, mean, 0.0};
    constexpr int kPixels = 400000;
    std::vector<float> light(kPixels, 0.0F);
    std::vector<float> charge(kPixels);
    collect_row(what, 0, light, charge);
    double sum = 0.0;
    double squares = 0.0;
    double cubes = 0.0;
    for (const float value : charge) {
        const double d = static_cast<double>(value) - mean;
        sum += d;
        squares += d * d;
        cubes += d * d * d;
    }
    // Six standard errors; central moments of the law as in tests/core/random_test.cpp.
    const double root_n = std::sqrt(static_cast<double>(kPixels));
    CHECK(std::fabs(sum / kPixels) < 6.0 * std::sqrt(mean) / root_n);
    CHECK(std::fabs(squares / kPixels - mean) <
          6.0 * std::sqrt(mean + 2.0 * mean * mean) / root_n + 0.06);
    const double spread = std::sqrt(15.0 * mean * mean * mean + 25.0 * mean * mean + mean);
    CHECK(std::fabs(cubes / kPixels - mean) < 6.0 * spread / root_n + 0.02 * mean);
}

TEST_CASE("pixels differ in response by what the scenario says, the same in each exposure") {
    constexpr double kResponse = 0.05;
    constexpr int kPixels = 100000;
    std::vector<float> first_light(kPixels, 1e6F);
    std::vector<float> second_light(kPixels, 1e6F);
    std::vector<float> charge(kPixels);
    collect_row({9, 1, 0, 0.0, kResponse}, 3, first_light, charge);
    collect_row({9, 2, 0, 0.0, kResponse}, 3, second_light, charge);
    CHECK(first_light == second_light);
    double squares = 0.0;
    for (const float value : first_light) {
        squares += std::pow(static_cast<double>(value) / 1e6 - 1.0, 2.0);
    }
    CHECK(std::sqrt(squares / kPixels) == Approx(kResponse).epsilon(0.02));
}

TEST_CASE("cosmic rays come in the number asked for and stay on the detector") {
    const Chip chip = small_chip();
    Image image(static_cast<std::size_t>(chip.width) * chip.height, 0.0F);
    add_cosmic_rays({9, 1, 0, 0.0, 0.0}, 0.0, chip.width, chip.height, image);
    CHECK(total(image) == 0.0);
    add_cosmic_rays({9, 1, 0, 0.0, 0.0}, 40.0, chip.width, chip.height, image);
    const auto hit = std::count_if(image.begin(), image.end(), [](float v) { return v > 0.0F; });
    CHECK(hit > 40);
    CHECK(hit < 2000);
}

}  // namespace straymark::simulate
