#include "score/response.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <numbers>
#include <random>

#include "score/scene.h"

namespace straymark::score {
namespace {

using test::empty_detector;
using test::gaussian_psf;

constexpr double kNoise = 7.0;
/// Signal, kernel and result are stored in single precision (6e-8 each); sums are double. The
/// stored kernel sums to 1 within 1e-7.
constexpr double kSingle = 1e-6;

float at(const std::vector<float>& response, const TrueDetector& detector, int x, int y) {
    return response[static_cast<std::size_t>(y * detector.width + x)];
}

/// The definition, term by term.
double by_definition(const TrueDetector& detector, int x, int y) {
    const int radius = detector.psf.radius;
    double sum = 0.0;
    double squares = 0.0;
    for (int j = -radius; j <= radius; ++j) {
        for (int i = -radius; i <= radius; ++i) {
            const auto p = static_cast<double>(detector.psf.values[static_cast<std::size_t>(
                (j + radius) * (2 * radius + 1) + i + radius)]);
            squares += p * p;
            if (x + i >= 0 && x + i < detector.width && y + j >= 0 && y + j < detector.height) {
                sum += p * static_cast<double>(detector.signal_e[static_cast<std::size_t>(
                               (y + j) * detector.width + x + i)]);
            }
        }
    }
    double noise = 0.0;
    for (const TrueAmplifier& amplifier : detector.amplifiers) {
        noise = amplifier.section.contains(x, y) ? amplifier.noise_e : noise;
    }
    return sum / (noise * std::sqrt(squares));
}

TEST_CASE("A plateau of a electrons responds with 2 sqrt(pi) s a / noise") {
    for (const double s : {1.5, 2.4}) {
        TrueDetector detector = empty_detector(150, 150, kNoise, gaussian_psf(s, 20));
        constexpr double kLevel = 3.5;
        std::fill(detector.signal_e.begin(), detector.signal_e.end(), static_cast<float>(kLevel));
        const std::vector<float> response = true_response(detector, 0);
        const double expected = 2.0 * std::sqrt(std::numbers::pi) * s * kLevel / kNoise;
        CHECK(static_cast<double>(at(response, detector, 75, 75)) ==
              Approx(expected).epsilon(kSingle));
        // On a straight edge half of the filter sees the plateau, and half of the central row.
        const double centre_row = 0.5 / (s * std::sqrt(2.0 * std::numbers::pi));
        CHECK(static_cast<double>(at(response, detector, 0, 75)) ==
              Approx(expected * (0.5 + centre_row)).epsilon(kSingle));
    }
}

TEST_CASE("A line with the PSF's own width responds with (L / noise) exp(-y^2 / 4 s^2)") {
    constexpr double kS = 1.8;
    constexpr double kPerPixel = 40.0;
    TrueDetector detector = empty_detector(120, 120, kNoise, gaussian_psf(kS, 20));
    for (int y = 0; y < detector.height; ++y) {
        const double across = std::exp(-(y - 60) * (y - 60) / (2.0 * kS * kS)) /
                              (kS * std::sqrt(2.0 * std::numbers::pi));
        for (int x = 0; x < detector.width; ++x) {
            detector.signal_e[static_cast<std::size_t>(y * detector.width + x)] =
                static_cast<float>(kPerPixel * across);
        }
    }
    const std::vector<float> response = true_response(detector, 0);
    for (const int distance : {0, 1, 3, 5}) {
        const double expected =
            kPerPixel / kNoise * std::exp(-distance * distance / (4.0 * kS * kS));
        CHECK(static_cast<double>(at(response, detector, 60, 60 + distance)) ==
              Approx(expected).epsilon(kSingle));
    }
}

TEST_CASE(
    "The response equals the sum of its definition everywhere, edges and tile borders included") {
    std::mt19937 random(20240611);
    std::uniform_real_distribution<float> level(-50.0F, 400.0F);
    TrueDetector detector = empty_detector(523, 301, kNoise, {});
    detector.amplifiers = {{"d1/a01", {0, 0, 200, 301}, 2.0, 5.0},
                           {"d1/a02", {200, 0, 523, 301}, 2.0, 11.0}};
    // Neither symmetric nor centred: correlation and convolution differ.
    detector.psf.radius = 5;
    double sum = 0.0;
    for (int i = 0; i < 121; ++i) {
        detector.psf.values.push_back(level(random) + 50.0F);
        sum += static_cast<double>(detector.psf.values.back());
    }
    for (float& value : detector.psf.values) {
        value = static_cast<float>(static_cast<double>(value) / sum);
    }
    for (float& value : detector.signal_e) {
        value = level(random);
    }
    const std::vector<float> response = true_response(detector, 0);
    for (const int y : {0, 1, 5, 150, 245, 246, 247, 299, 300}) {
        for (int x = 0; x < detector.width;
             x += x < 20 || x > 500 || (x > 190 && x < 260) ? 1 : 17) {
            CHECK(static_cast<double>(at(response, detector, x, y)) ==
                  Approx(by_definition(detector, x, y)).epsilon(kSingle).margin(1e-5));
        }
    }
}

TEST_CASE("A background box takes its mean away") {
    TrueDetector detector = empty_detector(100, 90, kNoise, gaussian_psf(1.5, 10));
    const auto pixel = [&detector](int x, int y) -> float& {
        return detector.signal_e[static_cast<std::size_t>(y * detector.width + x)];
    };
    SECTION("a plateau vanishes where the box does not reach beyond it") {
        std::fill(detector.signal_e.begin(), detector.signal_e.end(), 20.0F);
        const std::vector<float> response = true_response(detector, 33);
        CHECK(static_cast<double>(at(response, detector, 50, 45)) == Approx(0.0).margin(1e-5));
        // Half a box beyond the left edge: 17 of 33 columns remain.
        const std::vector<float> plain = true_response(detector, 0);
        const double expected =
            static_cast<double>(at(plain, detector, 0, 45)) -
            20.0 * 17.0 / 33.0 / (kNoise * std::sqrt(sum_of_squares(detector.psf)));
        CHECK(static_cast<double>(at(response, detector, 0, 45)) ==
              Approx(expected).epsilon(kSingle));
    }
    SECTION("a pixel lowers the box about it and nothing else") {
        pixel(50, 45) = 1000.0F;
        const std::vector<float> plain = true_response(detector, 0);
        for (const int side : {21, 20}) {
            const std::vector<float> response = true_response(detector, side);
            const double share =
                1000.0 / (side * side) / (kNoise * std::sqrt(sum_of_squares(detector.psf)));
            for (const int x : {50 - 10, 50 - 9, 50, 50 + 9, 50 + 10, 50 + 11}) {
                // An even box reaches one pixel farther to lower x: it still holds the pixel 10 px
                // to its left, not 10 to its right.
                const bool holds = x - side / 2 <= 50 && 50 < x - side / 2 + side;
                CHECK(static_cast<double>(at(response, detector, x, 45) -
                                          at(plain, detector, x, 45)) ==
                      Approx(holds ? -share : 0.0).margin(1e-4));
            }
        }
    }
}

TEST_CASE("Signal too faint to respond may be left out, within the stated bound") {
    TrueDetector detector = empty_detector(600, 300, kNoise, gaussian_psf(1.5, 10));
    std::fill(detector.signal_e.begin(), detector.signal_e.end(), 0.002F);
    for (const float value : true_response(detector, 0)) {
        REQUIRE(std::abs(static_cast<double>(value) - 2.0 * std::sqrt(std::numbers::pi) * 1.5 *
                                                          0.002 / kNoise) <= kResponseLeftOut);
    }
}

}  // namespace
}  // namespace straymark::score
