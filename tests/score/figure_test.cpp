#include "score/figure.h"

#include <catch2/catch.hpp>
#include <cstdint>

#include "score/response.h"
#include "score/scene.h"

namespace straymark::score {
namespace {

using test::EchoScene;

int count_of(const Canvas& canvas, Colour colour) {
    int count = 0;
    const auto rgb = canvas.rgb();
    for (std::size_t i = 0; i < rgb.size(); i += 3) {
        count += rgb[i] == colour.red && rgb[i + 1] == colour.green && rgb[i + 2] == colour.blue;
    }
    return count;
}

Canvas drawn(const EchoScene& scene, const FoundDetector& found) {
    const std::vector<float> response = true_response(scene.truth, 0);
    const NightScore night =
        night_score("crosstalk", {{"e1", "", score_detector(scene.truth, response, found)}});
    const std::vector<FigureDetector> detectors = {{scene.truth, response, found}};
    return figure_of(night, "e1", detectors);
}

constexpr Colour kMissedColour{213, 94, 0};     // vermilion of Okabe & Ito 2008
constexpr Colour kOutsideColour{240, 228, 66};  // yellow
constexpr int kSwatch = 12 * 12;                // the legend's own

TEST_CASE("The picture shows missed and falsely flagged pixels, and none where there are none") {
    const EchoScene scene;
    const FoundDetector good = scene.mask_of(scene.blobs);
    CHECK(count_of(drawn(scene, good), kMissedColour) == kSwatch);

    std::vector<EchoScene::Blob> believed = scene.blobs;
    believed.erase(believed.begin() + 2);
    CHECK(count_of(drawn(scene, scene.mask_of(believed)), kMissedColour) > kSwatch);

    believed = scene.blobs;
    believed.front().response *= 4.0;
    CHECK(count_of(drawn(scene, scene.mask_of(believed)), kOutsideColour) > kSwatch);
}

TEST_CASE("A detector of any shape, and one without echoes or mask, can be drawn") {
    for (const auto& [width, height] : {std::pair{3, 2000}, std::pair{1500, 4}, std::pair{1, 1}}) {
        const TrueDetector truth =
            test::empty_detector(width, height, 5.0, test::gaussian_psf(1.5, 5));
        const std::vector<float> response = true_response(truth, 0);
        const NightScore night =
            night_score("crosstalk", {{"e1", "", score_detector(truth, response, {})}});
        const std::vector<FigureDetector> detectors = {{truth, response, {}}};
        CHECK(figure_of(night, "e1", detectors).width() > 1000);
    }
}

TEST_CASE("Text is drawn dot by dot within the canvas") {
    constexpr Colour kWhite{255, 255, 255};
    constexpr Colour kBlack{0, 0, 0};
    Canvas canvas(30, 20, kWhite);
    canvas.text(2, 3, "I", kBlack, 2);
    // The serifs are three dots wide, the stem is one dot wide and five high, each dot 2 x 2.
    CHECK(count_of(canvas, kBlack) == 4 * (3 + 3 + 5));
    const auto dark_at = [&canvas](int x, int y) {
        return canvas.rgb()[std::size_t(3) * static_cast<std::size_t>(y * 30 + x)] == 0;
    };
    CHECK(dark_at(2 + 2, 3));                     // left end of the upper serif
    CHECK_FALSE(dark_at(2, 3));                   // the glyph's first column is empty
    CHECK(dark_at(2 + 4, 3 + 12));                // foot of the stem
    canvas.text(-3, 15, "straymark", kBlack, 3);  // over three edges
    CHECK(canvas.rgb().size() == 1800);
}

}  // namespace
}  // namespace straymark::score
