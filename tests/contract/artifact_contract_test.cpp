/// One suite over every artifact of the registry: promises of docs/architecture.md that none may
/// break. What an artifact needs to be exercised (a product, a digest) is in scene_of.

#include <catch2/catch.hpp>
#include <cmath>
#include <random>

#include "mask/decide.h"
#include "support/crosstalk_scene.h"

using namespace straymark;
using namespace straymark::test;

namespace {

/// A scene in which this artifact has something to predict; throws for one that has none yet, so
/// that a new artifact cannot be registered without joining the suite.
Scene scene_of(const Artifact& artifact, unsigned seed) {
    if (artifact.kind == ArtifactKind::crosstalk) {
        return random_scene(seed);
    }
    throw std::logic_error("no contract scene for " + artifact.name);
}

double answer(const std::vector<double>& signal, const Psf& psf, int px, int py) {
    double sum = 0.0;
    for (int dy = -psf.radius; dy <= psf.radius; ++dy) {
        for (int dx = -psf.radius; dx <= psf.radius; ++dx) {
            const int x = px + dx;
            const int y = py + dy;
            if (x >= 0 && y >= 0 && x < kSide && y < kSide) {
                sum += signal[static_cast<std::size_t>(y * kSide + x)] *
                       static_cast<double>(psf.values[static_cast<std::size_t>(
                           (dy + psf.radius) * (2 * psf.radius + 1) + dx + psf.radius)]);
            }
        }
    }
    return sum;
}

}  // namespace

TEST_CASE(
    "a pixel carries an artifact's bit if and only if the sum of its marks reaches the threshold") {
    for (const Artifact& artifact : registry()) {
        if (artifact.make == nullptr) {
            continue;
        }
        std::int64_t flagged = 0;
        for (const unsigned seed : {21U, 22U, 23U, 24U}) {
            const Scene scene = scene_of(artifact, seed);
            const auto predictor = artifact.make(scene.camera, scene.product);
            const auto prediction = predictor->predict(scene.digest, {1.0, 0, 0.0}, 2);
            for (int d = 0; d < 2; ++d) {
                const auto at = static_cast<std::size_t>(d);
                std::array<DetectorMarks, kArtifactKinds> marks;
                const auto kind = static_cast<std::size_t>(artifact.kind);
                marks[kind] = prediction->marks_on(d);
                DetectorMask mask;
                decide(scene.camera.detectors[at], scene.digest.detectors[at], marks, {}, {}, 2,
                       mask);
                // The sum, rendered by the marks themselves and filtered here by definition.
                std::vector<float> sum(kSide * kSide, 0.0F);
                std::vector<float> unmeasured = sum, variance = sum, other = sum;
                const PixelBox whole{0, 0, kSide, kSide};
                if (marks[kind].faint) {
                    marks[kind].faint->add_to(
                        {{whole, sum}, {whole, unmeasured}, {whole, variance}, {whole, other}});
                }
                for (const Mark& mark : marks[kind].marks) {
                    if (mark.signal) {
                        mark.signal->add_to({whole, sum}, 1.0F);
                    }
                }
                const std::vector<double> signal(sum.begin(), sum.end());
                const Psf& psf = scene.digest.detectors[at].psf;
                const ArtifactBits bits = bits_of(artifact.kind);
                const auto bit_at = [&](int x, int y, MaskBit bit) {
                    return (mask.bits[static_cast<std::size_t>(y * kSide + x)] & value_of(bit)) !=
                           0;
                };
                std::mt19937 random(seed);
                std::uniform_int_distribution<int> anywhere(0, kSide - 1);
                std::vector<DetectorPixel> borders;
                for (int y = 0; y < kSide; ++y) {
                    for (int x = 1; x < kSide; ++x) {
                        if (bit_at(x, y, bits.positive) != bit_at(x - 1, y, bits.positive)) {
                            borders.push_back({x, y});
                        }
                    }
                }
                REQUIRE_FALSE(borders.empty());
                for (int i = 0; i < 1500; ++i) {
                    DetectorPixel p{anywhere(random), anywhere(random)};
                    if (i % 2 == 0) {  // half of them within 3 pixels of a border
                        const DetectorPixel& b =
                            borders[static_cast<std::size_t>(random() % borders.size())];
                        p = {std::clamp(b.x + static_cast<int>(random() % 7) - 3, 0, kSide - 1),
                             std::clamp(b.y + static_cast<int>(random() % 7) - 3, 0, kSide - 1)};
                    }
                    const auto a =
                        static_cast<std::size_t>((p.x >= 60 ? 1 : 0) + (p.y >= 60 ? 2 : 0));
                    const double noise = scene.digest.detectors[at].amplifiers[a].noise_adu *
                                         scene.camera.detectors[at].amplifiers[a].gain_e_per_adu;
                    const double response = answer(signal, psf, p.x, p.y) /
                                            (noise / std::sqrt(psf.noise_equivalent_area_px));
                    if (std::abs(std::abs(response) - 1.0) < 1e-4) {
                        continue;  // within rounding of the threshold either verdict is right
                    }
                    CHECK(bit_at(p.x, p.y, bits.positive) == (response >= 1.0));
                    CHECK(bit_at(p.x, p.y, bits.negative) == (response <= -1.0));
                }
                flagged += mask.outcome[kind].flagged_px;
            }
        }
        CHECK(flagged > 1000);
    }
}

TEST_CASE("one thread and many give identical bits") {
    for (const Artifact& artifact : registry()) {
        if (artifact.make == nullptr) {
            continue;
        }
        const Scene scene = scene_of(artifact, 31);
        const auto predictor = artifact.make(scene.camera, scene.product);
        std::vector<MaskPixel> first;
        for (const int threads : {1, 3}) {
            const auto prediction = predictor->predict(scene.digest, {0.5, 0, 0.0}, threads);
            std::array<DetectorMarks, kArtifactKinds> marks;
            marks[static_cast<std::size_t>(artifact.kind)] = prediction->marks_on(0);
            DetectorMask mask;
            DecisionSettings settings;
            settings.threshold.fill(0.5);
            decide(scene.camera.detectors[0], scene.digest.detectors[0], marks, {}, settings,
                   threads, mask);
            if (first.empty()) {
                first = mask.bits;
            }
            CHECK(mask.bits == first);
        }
    }
}
