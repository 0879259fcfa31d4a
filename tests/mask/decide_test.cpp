#include "mask/decide.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <numbers>

#include "support/test_shapes.h"

using namespace straymark;
using namespace straymark::test;

namespace {

Mark mark_of(std::shared_ptr<const SignalShape> signal, double relative_error = 0.0,
             std::uint64_t group = 1) {
    Mark mark;
    mark.signal = std::move(signal);
    mark.errors.push_back({group, relative_error, nullptr});
    return mark;
}

DetectorMask decided(const PlainDetector& plain, std::vector<Mark> marks,
                     DecisionSettings settings = {}, int threads = 1) {
    std::array<DetectorMarks, kArtifactKinds> all;
    all[0].marks = std::move(marks);
    DetectorMask mask;
    decide(plain.detector, plain.digest, all, {}, settings, threads, mask);
    return mask;
}

bool has(const DetectorMask& mask, int x, int y, MaskBit bit) {
    return (mask.bits[static_cast<std::size_t>(y) * static_cast<std::size_t>(mask.width) +
                      static_cast<std::size_t>(x)] &
            value_of(bit)) != 0;
}

}  // namespace

TEST_CASE("a plateau responds with 2 sqrt(pi) s a / sigma under a Gaussian point-spread function") {
    // King 1983, PASP 95, 163: Np = 4 pi s^2, so a plateau of a responds with a sqrt(Np) / sigma.
    const double s = 2.0;
    const double noise = 10.0;
    const PlainDetector plain(128, 128, noise, gaussian_psf(14, s));
    const double a = 1.0;
    const DetectorMask mask = decided(plain, {mark_of(constant_shape({16, 16, 112, 112}, a))});
    const double expected = 2.0 * std::sqrt(std::numbers::pi) * s * a / noise;
    // Sampling a Gaussian of s = 2 px at pixel centres is exact to far better than this.
    CHECK(mask.outcome[0].marks.at(0).response == Approx(expected).epsilon(1e-4));

    // The same plateau, scaled to just reach and just miss the threshold in its middle.
    for (const double factor : {1.001, 0.999}) {
        const DetectorMask scaled =
            decided(plain, {mark_of(constant_shape({16, 16, 112, 112}, a * factor / expected))});
        CHECK(has(scaled, 64, 64, MaskBit::crosstalk_positive) == (factor > 1.0));
        CHECK_FALSE(has(scaled, 64, 64, MaskBit::crosstalk_negative));
        CHECK_FALSE(has(scaled, 2, 2, MaskBit::crosstalk_positive));
    }
}

TEST_CASE("a line of the point-spread function's width falls off as exp(-y^2 / 4 s^2)") {
    const double s = 2.0;
    const double noise = 10.0;
    const PlainDetector plain(160, 160, noise, gaussian_psf(14, s));
    const double per_length = 100.0;  // electrons per pixel of length: response 10 on the axis
    const auto line =
        std::make_shared<const FunctionShape>(PixelBox{0, 60, 160, 100}, [&](int, int y) {
            const double d = y - 80;
            return per_length * std::exp(-d * d / (2.0 * s * s)) /
                   (s * std::sqrt(2.0 * std::numbers::pi));
        });
    const DetectorMask mask = decided(plain, {mark_of(line)});
    // Flagged where 10 exp(-y^2 / 4 s^2) >= 1: |y| <= 2 s sqrt(ln 10) = 6.07, so 6 and not 7.
    CHECK(has(mask, 80, 86, MaskBit::crosstalk_positive));
    CHECK(has(mask, 80, 74, MaskBit::crosstalk_positive));
    CHECK_FALSE(has(mask, 80, 87, MaskBit::crosstalk_positive));
    CHECK_FALSE(has(mask, 80, 73, MaskBit::crosstalk_positive));
}

TEST_CASE("a Moffat profile has 1.7 times the noise-equivalent area of a Gaussian of its width") {
    // The design's computed value for beta 3; wings beyond the grid matter, hence the large radius.
    const double fwhm = 8.0;
    const Psf moffat = moffat_psf(80, fwhm, 3.0);
    const Psf gaussian = gaussian_psf(40, fwhm / 2.3548);
    CHECK(moffat.noise_equivalent_area_px / gaussian.noise_equivalent_area_px ==
          Approx(1.7).epsilon(0.02));
}

TEST_CASE("the sign of the response chooses the bit, and its own threshold decides") {
    const PlainDetector plain(96, 96, 10.0, gaussian_psf(10, 1.5));
    DecisionSettings settings;
    settings.threshold[0] = 0.5;
    const double unit = 10.0 / (2.0 * std::sqrt(std::numbers::pi) * 1.5);  // response 1
    const auto at = [&](double response) {
        return decided(plain, {mark_of(constant_shape({20, 20, 76, 76}, response * unit))},
                       settings);
    };
    CHECK(has(at(-0.6), 48, 48, MaskBit::crosstalk_negative));
    CHECK_FALSE(has(at(-0.6), 48, 48, MaskBit::crosstalk_positive));
    CHECK_FALSE(has(at(-0.45), 48, 48, MaskBit::crosstalk_negative));
    CHECK(has(at(0.6), 48, 48, MaskBit::crosstalk_positive));
}

TEST_CASE("marks that matter only together are flagged together, and opposite ones cancel") {
    const PlainDetector plain(96, 96, 10.0, gaussian_psf(10, 1.5));
    const double unit = 10.0 / (2.0 * std::sqrt(std::numbers::pi) * 1.5);
    const auto plateau = [&](double response) {
        return mark_of(constant_shape({20, 20, 76, 76}, response * unit));
    };
    CHECK(has(decided(plain, {plateau(0.6), plateau(0.6)}), 48, 48, MaskBit::crosstalk_positive));
    CHECK_FALSE(
        has(decided(plain, {plateau(1.5), plateau(-0.8)}), 48, 48, MaskBit::crosstalk_positive));
}

TEST_CASE("the signal counts as zero beyond the detector's edge") {
    const PlainDetector plain(96, 96, 10.0, gaussian_psf(10, 1.5));
    const double unit = 10.0 / (2.0 * std::sqrt(std::numbers::pi) * 1.5);
    // In the corner of a plateau that fills the detector a quarter, plus half the axis pixels'
    // share, of the filter sees signal: ((1 + P0) / 2)^2 with P0 the central line's weight.
    double centre = 0.0;
    for (int i = 0; i < 21; ++i) {
        centre +=
            static_cast<double>(plain.digest.psf.values[static_cast<std::size_t>(10 * 21 + i)]);
    }
    const double corner = std::pow(0.5 * (1.0 + centre), 2);
    for (const double factor : {1.01, 0.99}) {
        const DetectorMask mask =
            decided(plain, {mark_of(constant_shape({0, 0, 96, 96}, factor * unit / corner))});
        CHECK(has(mask, 0, 0, MaskBit::crosstalk_positive) == (factor > 1.0));
    }
}

TEST_CASE("a pixel is marginal where the estimate misses the threshold and its bound does not") {
    const PlainDetector plain(96, 96, 10.0, gaussian_psf(10, 1.5));
    const double unit = 10.0 / (2.0 * std::sqrt(std::numbers::pi) * 1.5);
    const auto bits_at = [&](double response, double relative) {
        const DetectorMask mask =
            decided(plain, {mark_of(constant_shape({20, 20, 76, 76}, response * unit), relative)});
        return std::pair(has(mask, 48, 48, MaskBit::crosstalk_positive),
                         has(mask, 48, 48, MaskBit::marginal));
    };
    CHECK(bits_at(0.9, 0.06) == std::pair(false, true));   // 0.9 + 2 * 0.054 = 1.008
    CHECK(bits_at(0.9, 0.05) == std::pair(false, false));  // 0.990
    CHECK(bits_at(1.05, 0.5) == std::pair(true, false));   // the estimate decides
}

TEST_CASE("errors of one group add, those of different groups add in quadrature") {
    const PlainDetector plain(96, 96, 10.0, gaussian_psf(10, 1.5));
    const double unit = 10.0 / (2.0 * std::sqrt(std::numbers::pi) * 1.5);
    const auto marginal = [&](std::uint64_t second_group) {
        const auto shape = constant_shape({20, 20, 76, 76}, 0.4 * unit);
        return has(decided(plain, {mark_of(shape, 0.15, 1), mark_of(shape, 0.15, second_group)}),
                   48, 48, MaskBit::marginal);
    };
    // 0.8 + 2 * (0.06 + 0.06) = 1.04; 0.8 + 2 * sqrt(2) * 0.06 = 0.97
    CHECK(marginal(1));
    CHECK_FALSE(marginal(2));
}

TEST_CASE("what rests on a prior makes pixels unassessed, never marginal") {
    const PlainDetector plain(96, 96, 10.0, gaussian_psf(10, 1.5));
    const double unit = 10.0 / (2.0 * std::sqrt(std::numbers::pi) * 1.5);
    Mark unmeasured;
    unmeasured.measured = false;
    const auto with_spread = [&](double response) {
        Mark mark = unmeasured;
        mark.errors.push_back({7, 0.0, constant_shape({20, 20, 76, 76}, response * unit)});
        return decided(plain, {mark});
    };
    const DetectorMask reached = with_spread(0.51);  // bound 1.02
    CHECK(has(reached, 48, 48, MaskBit::crosstalk_unassessed));
    CHECK_FALSE(has(reached, 48, 48, MaskBit::marginal));
    CHECK_FALSE(has(reached, 48, 48, MaskBit::crosstalk_positive));
    CHECK_FALSE(has(reached, 4, 4, MaskBit::crosstalk_unassessed));
    CHECK(reached.outcome[0].unassessed_px > 0);
    CHECK_FALSE(has(with_spread(0.49), 48, 48, MaskBit::crosstalk_unassessed));
}

TEST_CASE("a background box of 64 leaves little but the edges of a wide plateau") {
    const PlainDetector plain(400, 400, 10.0, gaussian_psf(10, 1.5));
    const double unit = 10.0 / (2.0 * std::sqrt(std::numbers::pi) * 1.5);
    DecisionSettings settings;
    settings.background_px = 64;
    const DetectorMask mask =
        decided(plain, {mark_of(constant_shape({100, 100, 300, 300}, 1.8 * unit))}, settings);
    // Deep inside both filters see the plateau whole: the difference is zero.
    CHECK_FALSE(has(mask, 200, 200, MaskBit::crosstalk_positive));
    // Just inside an edge P sees it all, the box half: 1.8 * (1 - about a half) misses 1; at a
    // corner the box sees a quarter: 1.8 * 0.75 reaches it.
    CHECK(has(mask, 107, 107, MaskBit::crosstalk_positive));
    CHECK_FALSE(has(mask, 107, 200, MaskBit::crosstalk_positive));
    // Just outside an edge the box alone sees the plateau: a negative response under 1.
    CHECK_FALSE(has(mask, 90, 200, MaskBit::crosstalk_negative));
}

TEST_CASE("template noise raises the noise that decides") {
    const PlainDetector plain(96, 96, 10.0, gaussian_psf(10, 1.5));
    const double unit = 10.0 / (2.0 * std::sqrt(std::numbers::pi) * 1.5);
    DecisionSettings settings;
    settings.template_noise = 0.75;  // hypot(1, 0.75) = 1.25
    const auto flagged = [&](double response) {
        return has(
            decided(plain, {mark_of(constant_shape({20, 20, 76, 76}, response * unit))}, settings),
            48, 48, MaskBit::crosstalk_positive);
    };
    CHECK(flagged(1.26));
    CHECK_FALSE(flagged(1.24));
}

TEST_CASE("seen pixels get their bits: saturated, bleed, defect, dead amplifier") {
    PlainDetector plain(96, 96, 10.0, gaussian_psf(10, 1.5));
    plain.digest.amplifiers[0].saturated.push_back({5, 10, 3});
    plain.digest.bleed.push_back({7, 20, 2});
    std::array<DetectorMarks, kArtifactKinds> none;
    DetectorMask mask;
    decide(plain.detector, plain.digest, none, {{30, 40, 32, 41}}, {}, 1, mask);
    CHECK(has(mask, 10, 5, MaskBit::saturated));
    CHECK(has(mask, 12, 5, MaskBit::saturated));
    CHECK_FALSE(has(mask, 13, 5, MaskBit::saturated));
    CHECK(has(mask, 21, 7, MaskBit::bleed));
    CHECK(has(mask, 31, 40, MaskBit::defect));
    CHECK_FALSE(has(mask, 32, 40, MaskBit::defect));
    CHECK(std::count(mask.bits.begin(), mask.bits.end(), MaskPixel{0}) == 96 * 96 - 3 - 2 - 2);

    plain.digest.amplifiers[0].state = AmplifierState::dead;
    decide(plain.detector, plain.digest, none, {}, {}, 1, mask);
    CHECK(has(mask, 95, 95, MaskBit::defect));
}

TEST_CASE("any number of threads paints the same bits") {
    const PlainDetector plain(700, 600, 10.0, moffat_psf(12, 3.0, 3.0));
    std::vector<Mark> marks;
    for (int i = 0; i < 60; ++i) {
        const int x = (i * 137) % 690;
        const int y = (i * 211) % 590;
        marks.push_back(mark_of(constant_shape({x, y, x + 9, y + 7}, (i % 7 - 3) * 2.0), 0.1,
                                static_cast<std::uint64_t>(i / 2)));
    }
    const DetectorMask one = decided(plain, marks, {}, 1);
    const DetectorMask many = decided(plain, marks, {}, 4);
    CHECK(one.bits == many.bits);
    CHECK(one.outcome[0].flagged_px > 0);
    CHECK(one.outcome[0].marginal_px > 0);
}
