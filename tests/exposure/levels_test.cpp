#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <random>

#include "exposure/bias.h"
#include "exposure/plane.h"
#include "exposure/sky_mesh.h"
#include "exposure/synthetic.h"

using namespace straymark;
using namespace straymark::test;

namespace {

constexpr int kSize = 256;
constexpr double kReadNoiseAdu = 3.0;

/// A blank amplifier with `overscan` columns, whose bias is level(row).
template <typename Level>
AmplifierFrame blank_frame(int overscan, const Level& level, std::uint64_t seed) {
    std::mt19937_64 engine(seed);
    std::normal_distribution<double> normal;
    AmplifierFrame frame;
    frame.width = kSize + overscan;
    frame.height = kSize;
    frame.data = {0, 0, kSize, kSize};
    if (overscan > 0) {
        frame.overscan = {{kSize, 0, kSize + overscan, kSize}};
    }
    for (int j = 0; j < frame.height; ++j) {
        for (int i = 0; i < frame.width; ++i) {
            frame.pixels.push_back(
                static_cast<float>(std::round(level(j) + kReadNoiseAdu * normal(engine))));
        }
    }
    return frame;
}

float& pixel(AmplifierFrame& frame, int i, int j) {
    return frame.pixels[static_cast<std::size_t>(j) * frame.width + i];
}

BiasLevels bias_of(const AmplifierFrame& frame) {
    AmplifierPlane plane;
    load_plane(frame, plane);
    return measure_bias(frame, plane);
}

double worst_error(const BiasLevels& bias, double (*level)(int)) {
    double worst = 0.0;
    for (int r = 0; r < kSize; ++r) {
        worst = std::max(worst, std::abs(bias.rows[r] - level(r)));
    }
    return worst;
}

double flat(int) {
    return 1234.0;
}
double drifting(int row) {
    return 1200.0 + 0.1 * row + 8.0 * std::sin(row / 60.0);
}

// One row's mean of 28 columns has an error of 3 / sqrt(28) = 0.57 ADU; the running median of 31
// rows has 1.25 / sqrt(31) of it = 0.13, of 7 rows at the ends 0.27; 256 rows reach 3 sigma of
// these. A sine of 8 ADU and 60 rows bends by 15^2 / (6 * 60^2) * 8 = 0.08 within the window.
constexpr double kLevelTolerance = 0.9;

}  // namespace

TEST_CASE("the bias is the level of the overscan, row by row") {
    CHECK(worst_error(bias_of(blank_frame(32, flat, 1)), flat) < kLevelTolerance);
    CHECK(worst_error(bias_of(blank_frame(32, drifting, 2)), drifting) < kLevelTolerance);
}

TEST_CASE("the mean bias is not held to whole counts") {
    const auto level = [](int) { return 1000.37; };
    // 256 rows of 28 columns: 3 / sqrt(7168) = 0.035; four sigmas, and 1.25 for the median.
    CHECK(bias_of(blank_frame(32, level, 3)).mean == Approx(1000.37).margin(0.18));
}

TEST_CASE("echoes and deferred charge in the overscan do not move the bias") {
    AmplifierFrame frame = blank_frame(32, drifting, 4);
    SECTION("the first columns after the data, in all rows") {
        for (int j = 0; j < kSize; ++j) {
            for (int i = 0; i < 4; ++i) {
                pixel(frame, kSize + i, j) += 400.0F / static_cast<float>(1 + i);
            }
        }
    }
    SECTION("a third of the columns of forty rows, as by an echo of a saturated star") {
        for (int j = 100; j < 140; ++j) {
            for (int i = 10; i < 19; ++i) {
                pixel(frame, kSize + i, j) += 60.0F;
            }
        }
    }
    SECTION("all columns of ten rows, as where a trail ends in the register") {
        for (int j = 70; j < 80; ++j) {
            for (int i = 0; i < 32; ++i) {
                pixel(frame, kSize + i, j) += 5000.0F;
            }
        }
        // The median of 31 rows, 10 of which are wild, is their 21-row quantile at 0.74: 0.64 sigma
        // of a row's mean, 0.37 ADU, and the drift across the window, 0.25 * 5.
        CHECK(worst_error(bias_of(frame), drifting) < kLevelTolerance + 0.4 + 1.3);
        return;
    }
    SECTION("pixels without a value") {
        for (int j = 0; j < kSize; ++j) {
            pixel(frame, kSize + 12, j) = NAN;
        }
        for (int i = 0; i < 32; ++i) {
            pixel(frame, kSize + i, 200) = NAN;
        }
    }
    CHECK(worst_error(bias_of(frame), drifting) < kLevelTolerance + 0.3);
}

TEST_CASE("deferred charge in half the columns of a narrow overscan does not move the bias") {
    AmplifierFrame frame = blank_frame(8, flat, 7);
    for (int j = 0; j < kSize; ++j) {
        for (int i = 0; i < 4; ++i) {
            pixel(frame, kSize + i, j) += 200.0F;
        }
    }
    // The four columns left have sqrt(7) times the error of 28.
    CHECK(worst_error(bias_of(frame), flat) < 2.65 * kLevelTolerance);
}

TEST_CASE("without overscan the prescan gives the bias, without either it is zero") {
    AmplifierFrame frame = blank_frame(32, flat, 5);
    frame.overscan.clear();
    CHECK(bias_of(frame).mean == 0.0);
    frame.prescan = {{kSize + 4, 0, kSize + 32, kSize}};
    CHECK(worst_error(bias_of(frame), flat) < kLevelTolerance);
}

TEST_CASE("a strip beyond the last row gives one level where nothing lies beside the rows") {
    AmplifierFrame frame = blank_frame(0, flat, 6);
    frame.data = {0, 0, kSize, kSize - 40};
    frame.overscan = {{0, kSize - 40, kSize, kSize}};
    AmplifierPlane plane;
    load_plane(frame, plane);
    const BiasLevels bias = measure_bias(frame, plane);
    REQUIRE(bias.rows.size() == kSize - 40);
    CHECK(bias.mean == Approx(1234.0).margin(0.2));
}

namespace {

struct SkyCase {
    AmplifierPlane plane;
    BiasLevels bias;
};

/// A sky of 200 ADU (gain 2, read noise 6 e) with a slope, above a bias of 1000; stars if wanted.
SkyCase sky_case(double slope_per_px, int stars, std::uint64_t seed) {
    constexpr int kSide = 512;
    std::mt19937_64 engine(seed);
    std::uniform_real_distribution<double> uniform;
    std::normal_distribution<double> normal;
    Field field(kSide, kSide, 400.0);
    for (int k = 0; k < stars; ++k) {
        add_star(field, kSide * uniform(engine), kSide * uniform(engine),
                 500.0 / std::pow(uniform(engine), 1.2), 2.8, 3.0, 15);
    }
    SkyCase out;
    out.plane.ticks = kSide;
    out.plane.rows = kSide;
    out.bias.rows.assign(kSide, 1000.0F);
    for (int y = 0; y < kSide; ++y) {
        for (int x = 0; x < kSide; ++x) {
            const double electrons = field.at(x, y);
            const double adu =
                (electrons + std::sqrt(electrons + 36.0) * normal(engine)) / 2.0 + slope_per_px * x;
            out.plane.values.push_back(static_cast<float>(std::round(1000.0 + adu)));
        }
    }
    return out;
}

// (400 + 36) e^2 and the variance of rounding, 1/12 ADU^2.
const double kTrueNoise = std::sqrt(436.0 / 4.0 + 1.0 / 12.0);
// A sample of 16,384 gives a standard deviation to 0.6 %; clipping costs a little; 3 sigma.
constexpr double kNoiseTolerance = 0.02;

}  // namespace

TEST_CASE("sky and noise of an empty field are those put in") {
    const SkyCase field = sky_case(0.0, 0, 1);
    const SkyLevels sky = measure_sky(field.plane, field.bias, 60000.0F);
    CHECK(sky.noise_adu == Approx(kTrueNoise).epsilon(kNoiseTolerance));
    // 16 cells of 512 pixels: 10.4 / sqrt(8192) = 0.12 ADU; 4 sigma.
    CHECK(sky.mesh.mean() == Approx(200.0).margin(0.5));
    CHECK_FALSE(sky.constant);
}

TEST_CASE("a gradient is sky, and does not count as noise") {
    const double slope = 0.2;
    const SkyCase field = sky_case(slope, 0, 2);
    const SkyLevels sky = measure_sky(field.plane, field.bias, 60000.0F);
    // 102 ADU of gradient add 10 e of photon noise at the far end that the fake leaves out.
    CHECK(sky.noise_adu == Approx(kTrueNoise).epsilon(kNoiseTolerance));
    for (const int tick : {0, 100, 300, 511}) {
        for (const int row : {0, 250, 511}) {
            // A node has an error of 10.4 / sqrt(512) = 0.46 ADU, 1.5 of it where extrapolated.
            CHECK(sky.mesh.at(tick, row) == Approx(200.0 + slope * tick).margin(4.0 * 0.69));
        }
    }
}

TEST_CASE("stars move the sky by less than a tenth of its noise and the noise by a few per cent") {
    const SkyCase field = sky_case(0.0, 400, 3);  // one for each 650 pixels: a crowded field
    const SkyLevels sky = measure_sky(field.plane, field.bias, 60000.0F);
    CHECK(sky.noise_adu == Approx(kTrueNoise).epsilon(0.05));
    CHECK(std::abs(sky.mesh.mean() - 200.0) < 0.15 * kTrueNoise);
}

TEST_CASE("a cell filled by an object takes the level of its neighbours") {
    SkyCase field = sky_case(0.05, 0, 4);
    for (int y = 130; y < 250; ++y) {
        for (int x = 130; x < 250; ++x) {
            field.plane.row(y)[x] += 300.0F;
        }
    }
    const SkyLevels sky = measure_sky(field.plane, field.bias, 60000.0F);
    CHECK(sky.mesh.at(191, 191) == Approx(200.0 + 0.05 * 191).margin(2.0));
}

TEST_CASE("cells without valid pixels take what their neighbours let expect") {
    SkyCase field = sky_case(0.0, 0, 5);
    for (int y = 0; y < 200; ++y) {
        for (int x = 0; x < 512; ++x) {
            field.plane.row(y)[x] = y < 140 ? NAN : 65535.0F;
        }
    }
    const SkyLevels sky = measure_sky(field.plane, field.bias, 60000.0F);
    CHECK(sky.noise_adu == Approx(kTrueNoise).epsilon(kNoiseTolerance));
    CHECK(sky.mesh.at(256, 30) == Approx(200.0).margin(6.0));
}

TEST_CASE("the sky of a row agrees with the sky of its pixels") {
    for (const auto& [ticks, columns] : {std::pair{512, 4}, {300, 2}, {90, 1}, {1000, 7}}) {
        std::vector<float> levels(static_cast<std::size_t>(3 * columns));
        std::generate(levels.begin(), levels.end(),
                      [k = 0]() mutable { return static_cast<float>((37 * k++) % 11); });
        const SkyMesh mesh(ticks, 384, columns, 3, levels);
        std::vector<float> row(static_cast<std::size_t>(ticks));
        for (const int r : {0, 63, 64, 200, 383}) {
            mesh.fill_row(r, row.data());
            for (int t = 0; t < ticks; ++t) {
                CHECK(row[t] == Approx(mesh.at(t, r)).margin(1e-4));
            }
        }
    }
}

TEST_CASE("pixels that are all equal are constant") {
    SkyCase field = sky_case(0.0, 0, 6);
    std::fill(field.plane.values.begin(), field.plane.values.end(), 0.0F);
    CHECK(measure_sky(field.plane, field.bias, 60000.0F).constant);
}
