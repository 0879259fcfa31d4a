#include <catch2/catch.hpp>
#include <cmath>
#include <functional>
#include <random>

#include "exposure/measure.h"
#include "exposure/moffat.h"
#include "exposure/synthetic.h"

using namespace straymark;
using namespace straymark::test;

namespace {

constexpr int kSide = 512;
constexpr double kSky = 400.0;
constexpr double kReadNoise = 6.0;

/// Value of the true image, averaged over the pixel at (dx, dy).
using Profile = std::function<double(double dx, double dy)>;

Profile moffat(double fwhm, double beta) {
    return [=](double dx, double dy) { return moffat_pixel(dx, dy, fwhm, beta); };
}

/// Something no Moffat profile describes: an elongated core and a broad, shifted skirt.
double lopsided(double dx, double dy) {
    double sum = 0.0;
    constexpr int kPoints = 7;
    for (int j = 0; j < kPoints; ++j) {
        for (int i = 0; i < kPoints; ++i) {
            const double x = dx + (i + 0.5) / kPoints - 0.5;
            const double y = dy + (j + 0.5) / kPoints - 0.5;
            const double u = 0.8 * x + 0.6 * y;
            const double v = -0.6 * x + 0.8 * y;
            sum += 0.7 * std::exp(-0.5 * (u * u / 2.25 + v * v / 1.44)) / (2.0 * M_PI * 1.8);
            const double w = (x - 0.6) * (x - 0.6) + y * y;
            sum += 0.3 * std::exp(-0.5 * w / 9.0) / (2.0 * M_PI * 9.0);
        }
    }
    return sum / (kPoints * kPoints);
}

/// The true image on the grid of `psf`, sum 1, centred on the centroid.
std::vector<double> true_values(const Psf& psf, const Profile& profile, double cx, double cy) {
    std::vector<double> values;
    double sum = 0.0;
    for (int j = -psf.radius; j <= psf.radius; ++j) {
        for (int i = -psf.radius; i <= psf.radius; ++i) {
            values.push_back(profile(i + cx, j + cy));
            sum += values.back();
        }
    }
    for (double& value : values) {
        value /= sum;
    }
    return values;
}

struct Comparison {
    double area_ratio = 0.0;  ///< noise-equivalent areas, measured over true
    double worst = 0.0;       ///< difference in units of the true peak
    double sum = 0.0;
};

Comparison compare(const Psf& psf, const Profile& profile, double cx = 0.0, double cy = 0.0) {
    const std::vector<double> expected = true_values(psf, profile, cx, cy);
    Comparison result;
    double squares = 0.0;
    const double peak = *std::max_element(expected.begin(), expected.end());
    for (std::size_t k = 0; k < expected.size(); ++k) {
        squares += expected[k] * expected[k];
        result.sum += psf.values[k];
        result.worst = std::max(result.worst, std::abs(expected[k] - psf.values[k]) / peak);
    }
    result.area_ratio = psf.noise_equivalent_area_px * squares;
    return result;
}

/// `count` stars on a jittered grid, signal to noise from 30 to 300 in equal steps of its
/// logarithm.
Field star_field(const Profile& profile, double area, int count, std::uint64_t seed) {
    std::mt19937_64 engine(seed);
    std::uniform_real_distribution<double> uniform;
    Field field(kSide, kSide, kSky);
    const int cells = static_cast<int>(std::ceil(std::sqrt(count)));
    const double cell = double(kSide) / cells;
    const double noise = std::sqrt(kSky + kReadNoise * kReadNoise);
    for (int k = 0; k < count; ++k) {
        const double x = (k % cells + 0.4 + 0.2 * uniform(engine)) * cell;
        const int line = k / cells;
        const double y = (line + 0.4 + 0.2 * uniform(engine)) * cell;
        const double snr = 30.0 * std::pow(10.0, (k + 0.5) / count);
        // snr = F / sqrt(F + area noise^2)
        const double flux =
            0.5 *
            (snr * snr + std::sqrt(std::pow(snr, 4.0) + 4.0 * snr * snr * area * noise * noise));
        for (int j = -40; j <= 40; ++j) {
            for (int i = -40; i <= 40; ++i) {
                const int px = static_cast<int>(x) + i;
                const int py = static_cast<int>(y) + j;
                if (px >= 0 && py >= 0 && px < kSide && py < kSide) {
                    field.at(px, py) += flux * profile(px - x, py - y);
                }
            }
        }
    }
    return field;
}

Psf measured_psf(const Field& field, std::uint64_t seed, Corner corner = Corner::lower_left,
                 SerialAxis serial = SerialAxis::x) {
    const Camera camera = make_camera(kSide, kSide, 1, 1, {corner}, serial);
    MemoryFrame frame(camera, field, seed);
    return measure_detector(camera, 0, frame, {}, 1).psf;
}

}  // namespace

TEST_CASE("the point-spread function of a Moffat field is recovered at any seeing") {
    const auto [fwhm, beta] = GENERATE(std::pair{2.0, 3.0}, std::pair{2.8, 3.0},
                                       std::pair{2.8, 2.2}, std::pair{8.0, 3.0});
    const Field field =
        star_field(moffat(fwhm, beta), moffat_noise_equivalent_area(fwhm, beta, 20), 40, 11);
    const Psf psf = measured_psf(field, 12);
    REQUIRE(psf.source == PsfSource::measured);
    const Comparison result = compare(psf, moffat(fwhm, beta));
    INFO("FWHM " << fwhm << " beta " << beta);
    CHECK(result.sum == Approx(1.0).margin(1e-5));  // 4,225 floats
    CHECK(result.area_ratio == Approx(1.0).epsilon(0.03));
    CHECK(result.worst < 0.02);
    CHECK(psf.stars >= 12);
    CHECK(psf.radius >= 10);
    // Of the image averaged over pixels, which is wider than the profile.
    CHECK(moffat_pixel(0.5 * psf.fwhm_px, 0.0, fwhm, beta) ==
          Approx(0.5 * moffat_pixel(0.0, 0.0, fwhm, beta)).epsilon(0.03));
}

TEST_CASE("eight stars give the noise-equivalent area within 8 per cent") {
    for (const std::uint64_t seed : {1U, 2U, 3U}) {
        const Field field =
            star_field(moffat(2.8, 3.0), moffat_noise_equivalent_area(2.8, 3.0, 20), 8, seed);
        const Psf psf = measured_psf(field, seed + 20);
        REQUIRE(psf.source == PsfSource::measured);
        CHECK(compare(psf, moffat(2.8, 3.0)).area_ratio == Approx(1.0).epsilon(0.08));
    }
}

TEST_CASE("an image that no Moffat profile describes is recovered from the stack") {
    double sum = 0.0, mx = 0.0, squares = 0.0;
    for (int j = -20; j <= 20; ++j) {
        for (int i = -20; i <= 20; ++i) {
            const double value = lopsided(i, j);
            sum += value;
            mx += value * i;
            squares += value * value;
        }
    }
    const Field field = star_field(lopsided, sum * sum / squares, 60, 31);
    SECTION("as it lies on the detector") {
        const Psf psf = measured_psf(field, 32);
        REQUIRE(psf.source == PsfSource::measured);
        // Where a lopsided image has its centre is a convention: the best offset along x counts.
        double worst = 1.0;
        double area_ratio = 0.0;
        for (double offset = 0.0; offset < 0.4; offset += 0.02) {
            for (double up = -0.1; up < 0.11; up += 0.02) {
                const Comparison result = compare(psf, lopsided, offset, up);
                if (result.worst < worst) {
                    worst = result.worst;
                    area_ratio = result.area_ratio;
                }
            }
        }
        CHECK(worst < 0.03);
        CHECK(area_ratio == Approx(1.0).epsilon(0.03));
    }
    SECTION("and the same from whichever corner it is read") {
        const Psf one = measured_psf(field, 33);
        const auto corner = GENERATE(Corner::upper_right, Corner::lower_right);
        const auto serial = GENERATE(SerialAxis::x, SerialAxis::y);
        const Psf other = measured_psf(field, 34, corner, serial);
        REQUIRE(one.radius == other.radius);
        const float peak = *std::max_element(one.values.begin(), one.values.end());
        for (std::size_t k = 0; k < one.values.size(); ++k) {
            CHECK(std::abs(one.values[k] - other.values[k]) < 0.02F * peak);
        }
    }
}

TEST_CASE("a Moffat image of beta 3 has 1.7 times a Gaussian's noise-equivalent area") {
    // King 1983, PASP 95, 163: 4 pi s^2 for a Gaussian; the factor is docs/methods.md's.
    const Field field =
        star_field(moffat(6.0, 3.0), moffat_noise_equivalent_area(6.0, 3.0, 30), 40, 41);
    const Psf psf = measured_psf(field, 42);
    const double s = psf.fwhm_px / 2.3548;
    CHECK(psf.noise_equivalent_area_px / (4.0 * M_PI * s * s) == Approx(1.7).epsilon(0.03));
}

TEST_CASE("a field with too few stars has no point-spread function") {
    CHECK(measured_psf(Field(kSide, kSide, kSky), 51).source == PsfSource::none);
    const Field field =
        star_field(moffat(2.8, 3.0), moffat_noise_equivalent_area(2.8, 3.0, 20), 4, 52);
    CHECK(measured_psf(field, 53).source == PsfSource::none);
}

TEST_CASE("neighbours, cosmic rays and galaxies do not spoil the point-spread function") {
    Field field = star_field(moffat(2.8, 3.0), moffat_noise_equivalent_area(2.8, 3.0, 20), 40, 61);
    std::mt19937_64 engine(62);
    std::uniform_real_distribution<double> uniform;
    for (int k = 0; k < 60; ++k) {  // faint stars anywhere
        add_star(field, kSide * uniform(engine), kSide * uniform(engine), 3000.0, 2.8, 3.0, 20);
    }
    for (int k = 0; k < 15; ++k) {  // galaxies, twice as wide
        add_star(field, kSide * uniform(engine), kSide * uniform(engine), 40000.0, 5.6, 2.0, 40);
    }
    for (int k = 0; k < 60; ++k) {  // cosmic rays of one to three pixels
        const int x = static_cast<int>(1 + (kSide - 4) * uniform(engine));
        const int y = static_cast<int>(1 + (kSide - 4) * uniform(engine));
        for (int i = 0; i < 1 + k % 3; ++i) {
            field.at(x + i, y + (k % 2) * i) += 4000.0;
        }
    }
    const Psf psf = measured_psf(field, 63);
    REQUIRE(psf.source == PsfSource::measured);
    const Comparison result = compare(psf, moffat(2.8, 3.0));
    CHECK(result.area_ratio == Approx(1.0).epsilon(0.04));
    CHECK(result.worst < 0.03);
}

TEST_CASE("detectors without a point-spread function take the median of the others") {
    ExposureDigest digest;
    digest.detectors.resize(4);
    for (int d = 0; d < 3; ++d) {
        Psf& psf = digest.detectors[d].psf;
        psf.source = PsfSource::measured;
        psf.radius = d == 2 ? 2 : 1;
        psf.fwhm_px = 2.0 + d;
        const std::size_t pixels = d == 2 ? 25 : 9;
        psf.values.assign(pixels, 0.0F);
        // All their light in the central pixel and in the one to its right: 0.9, 0.8, 0.4.
        const float centre = d == 0 ? 0.9F : d == 1 ? 0.8F : 0.4F;
        psf.values[pixels / 2] = centre;
        psf.values[pixels / 2 + 1] = 1.0F - centre;
    }
    const std::vector<float> own = digest.detectors[0].psf.values;
    share_psf(digest);
    CHECK(digest.detectors[0].psf.values == own);
    const Psf& shared = digest.detectors[3].psf;
    REQUIRE(shared.source == PsfSource::neighbours);
    CHECK(shared.radius == 2);
    CHECK(shared.fwhm_px == 3.0);
    CHECK(shared.values[12] == Approx(0.8));
    CHECK(shared.values[13] == Approx(0.2));
    CHECK(shared.noise_equivalent_area_px == Approx(1.0 / (0.64 + 0.04)));
}

TEST_CASE("without any measured point-spread function there is none to share") {
    ExposureDigest digest;
    digest.detectors.resize(2);
    share_psf(digest);
    CHECK(digest.detectors[0].psf.source == PsfSource::none);
}

TEST_CASE("a Moffat profile's pixel mean and derivatives agree with brute force") {
    const MoffatShape shape{0.21, 0.03, 0.16, 2.7};
    CHECK(MoffatShape::circular(2.8, 3.0).fwhm() == Approx(2.8));
    const PixelQuadrature quadrature(3);
    for (const auto& offset : {std::pair{0.0, 0.0}, {0.4, -1.3}, {-3.2, 2.1}}) {
        const double dx = offset.first;
        const double dy = offset.second;
        double sum = 0.0;
        constexpr int kPoints = 50;
        for (int j = 0; j < kPoints; ++j) {
            for (int i = 0; i < kPoints; ++i) {
                const double x = dx + (i + 0.5) / kPoints - 0.5;
                const double y = dy + (j + 0.5) / kPoints - 0.5;
                const double q = 0.21 * x * x + 0.06 * x * y + 0.16 * y * y;
                sum += std::pow(1.0 + q, -2.7);
            }
        }
        sum /= kPoints * kPoints;
        const MoffatPixel pixel = quadrature.derivatives(shape, dx, dy);
        // The rule is of fifth order: here within 1e-4 of the central value; midpoints 1e-5.
        CHECK(pixel.value == Approx(sum).margin(1e-4));
        CHECK(quadrature.value(shape, dx, dy) == Approx(pixel.value).epsilon(1e-12));
        const double h = 1e-5;
        const auto slope = [&](const MoffatShape& step, double step_x, double step_y) {
            const auto value = [&](double k) {
                const MoffatShape moved{shape.a + k * step.a, shape.b + k * step.b,
                                        shape.c + k * step.c, shape.beta + k * step.beta};
                return quadrature.value(moved, dx + k * step_x, dy + k * step_y);
            };
            return (value(h) - value(-h)) / (2.0 * h);
        };
        const MoffatShape still{0.0, 0.0, 0.0, 0.0};
        CHECK(pixel.d_dx == Approx(slope(still, 1.0, 0.0)).margin(1e-8));
        CHECK(pixel.d_dy == Approx(slope(still, 0.0, 1.0)).margin(1e-8));
        CHECK(pixel.d_shape[0] == Approx(slope({1.0, 0.0, 0.0, 0.0}, 0, 0)).margin(1e-7));
        CHECK(pixel.d_shape[1] == Approx(slope({0.0, 1.0, 0.0, 0.0}, 0, 0)).margin(1e-7));
        CHECK(pixel.d_shape[2] == Approx(slope({0.0, 0.0, 1.0, 0.0}, 0, 0)).margin(1e-7));
        CHECK(pixel.d_shape[3] == Approx(slope({0.0, 0.0, 0.0, 1.0}, 0, 0)).margin(1e-7));
    }
}
