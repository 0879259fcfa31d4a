#include "mask/kernel.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <random>

#include "support/test_shapes.h"

using namespace straymark;
using namespace straymark::test;

namespace {

/// The filter's answer straight from its definition: sum over q of a(q) D(q - p).
double by_definition(const std::vector<float>& signal, const PixelBox& box, const Psf& psf,
                     int background_px, int px, int py) {
    double sum = 0.0;
    const int below = background_px / 2;
    for (int qy = box.y0; qy < box.y1; ++qy) {
        for (int qx = box.x0; qx < box.x1; ++qx) {
            const int dx = qx - px;
            const int dy = qy - py;
            double weight = 0.0;
            if (std::abs(dx) <= psf.radius && std::abs(dy) <= psf.radius) {
                weight += static_cast<double>(psf.values[static_cast<std::size_t>(
                    (dy + psf.radius) * (2 * psf.radius + 1) + dx + psf.radius)]);
            }
            if (background_px > 0 && dx >= -below && dx < background_px - below && dy >= -below &&
                dy < background_px - below) {
                weight -= 1.0 / (static_cast<double>(background_px) * background_px);
            }
            sum +=
                weight *
                static_cast<double>(
                    signal[static_cast<std::size_t>((qy - box.y0) * box.width() + (qx - box.x0))]);
        }
    }
    return sum;
}

/// A lopsided profile: a turned or mirrored kernel cannot pass for the right one.
Psf lopsided_psf() {
    Psf psf = moffat_psf(5, 3.0, 3.0);
    for (int y = -5; y <= 5; ++y) {
        for (int x = -5; x <= 5; ++x) {
            psf.values[static_cast<std::size_t>((y + 5) * 11 + x + 5)] *=
                static_cast<float>(1.0 + 0.08 * x + 0.05 * y);
        }
    }
    return psf;
}

}  // namespace

TEST_CASE("the filter's answer equals its definition, with and without a background box") {
    const Psf psf = lopsided_psf();
    std::mt19937 random(11);
    std::normal_distribution<float> normal(0.0F, 3.0F);
    const PixelBox box{10, 20, 58, 63};
    std::vector<float> signal(static_cast<std::size_t>(box.width() * box.height()));
    for (float& value : signal) {
        value = normal(random);
    }
    for (const int background : {0, 7, 16}) {
        const DetectionKernel kernel(psf, background);
        const PixelBox tile{8, 30, 40, 70};  // reaches beyond the signal on two sides
        std::vector<float> answer(static_cast<std::size_t>(tile.width() * tile.height()));
        std::vector<float> scratch;
        kernel.answer({box, signal}, 0.0F, {tile, answer}, scratch);
        for (int y = tile.y0; y < tile.y1; y += 3) {
            for (int x = tile.x0; x < tile.x1; x += 2) {
                const double expected = by_definition(signal, box, psf, background, x, y);
                // Single precision over 121 terms of size 0.1: a few 1e-6.
                CHECK(static_cast<double>(answer[static_cast<std::size_t>(
                          (y - tile.y0) * tile.width() + x - tile.x0)]) ==
                      Approx(expected).margin(2e-5));
                CHECK(kernel.answer_at({box, signal}, x, y) == Approx(expected).margin(2e-5));
            }
        }
    }
}

TEST_CASE("leaving out signals under the cut changes the answer by no more than promised") {
    const Psf psf = lopsided_psf();
    std::mt19937 random(5);
    std::exponential_distribution<float> exponential(1.0F);
    const PixelBox box{0, 0, 64, 64};
    std::vector<float> signal(64 * 64);
    for (float& value : signal) {
        value = exponential(random);
    }
    const DetectionKernel kernel(psf, 0);
    std::vector<float> whole(64 * 64);
    std::vector<float> cut(64 * 64);
    std::vector<float> scratch;
    kernel.answer({box, signal}, 0.0F, {box, whole}, scratch);
    kernel.answer({box, signal}, 1.5F, {box, cut}, scratch);
    float worst = 0.0F;
    for (std::size_t i = 0; i < whole.size(); ++i) {
        worst = std::max(worst, std::fabs(whole[i] - cut[i]));
    }
    CHECK(static_cast<double>(worst) <= 1.5 * kernel.weight_sum());
    CHECK(worst > 0.1F);  // the cut did something
}
