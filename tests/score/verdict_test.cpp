#include "score/verdict.h"

#include <algorithm>
#include <catch2/catch.hpp>
#include <map>
#include <set>

#include "score/report.h"
#include "score/response.h"
#include "score/scene.h"

namespace straymark::score {
namespace {

using test::EchoScene;
using Blob = EchoScene::Blob;

std::vector<Figure> judge(const EchoScene& scene, const FoundDetector& found) {
    return figures_of(score_detector(scene.truth, true_response(scene.truth, 0), found));
}

/// Names of the figures that are not met.
std::set<std::string> unmet(const EchoScene& scene, const FoundDetector& found) {
    std::set<std::string> names;
    for (const Figure& figure : judge(scene, found)) {
        if (!figure.met) {
            names.insert(figure.name);
        }
    }
    return names;
}

std::set<std::string> unmet(const EchoScene& scene, const std::vector<Blob>& believed) {
    return unmet(scene, scene.mask_of(believed));
}

using Names = std::set<std::string>;

TEST_CASE("A mask by the closed form meets every figure") {
    const EchoScene scene;
    const std::vector<Figure> figures = judge(scene, scene.mask_of(scene.blobs));
    std::map<std::string, double> value;
    for (const Figure& figure : figures) {
        INFO(figure.text << ": " << figure.shown);
        CHECK(figure.met);
        value[figure.name] = figure.value;
    }
    CHECK(value["pixel_completeness"] == 1.0);
    CHECK(value["echo_completeness"] == 1.0);
    // Blobs lie 40 px apart: discs of radius 2 s sqrt(ln R) hold exactly the true area.
    CHECK(value["area_ratio"] == Approx(1.0).margin(0.02));
    CHECK(value["slope"] == Approx(1.0).margin(1e-9));
}

TEST_CASE("Echoes that were not predicted are missed, as pixels and as marks") {
    const EchoScene scene;
    std::vector<Blob> believed = scene.blobs;
    SECTION("one of the strongest") {
        believed.erase(believed.begin() + 2);
        CHECK(unmet(scene, believed) == Names{"pixel_completeness", "echo_completeness"});
    }
    SECTION("a whole pair") {
        believed.erase(believed.begin() + 3, believed.begin() + 6);
        CHECK(unmet(scene, believed) == Names{"pixel_completeness", "echo_completeness", "pairs"});
    }
    SECTION("all: there is nothing to judge slopes by, and that is not good") {
        const Names names = unmet(scene, std::vector<Blob>{});
        CHECK(names.contains("slope"));
        CHECK(names.contains("amplifier_slopes"));
        CHECK(names.contains("pixel_completeness"));
    }
}

TEST_CASE("Painted without a mark, or listed without paint, an echo is not found") {
    const EchoScene scene;
    FoundDetector found = scene.mask_of(scene.blobs);
    SECTION("no row") {
        found.marks.erase(found.marks.begin());
    }
    SECTION("a row of another source") {
        found.marks.front().source = "d1/a04";
    }
    SECTION("no paint at its peak") {
        found.bits[static_cast<std::size_t>(scene.blobs.front().y * scene.truth.width +
                                            scene.blobs.front().x)] = 0;
    }
    const Names names = unmet(scene, found);
    CHECK(names.contains("echo_completeness"));
    CHECK_FALSE(names.contains("slope"));
}

TEST_CASE("A pair whose echoes are predicted one pixel off is found out") {
    const EchoScene scene;
    std::vector<Blob> believed = scene.blobs;
    for (Blob& blob : believed) {
        if (blob.victim == 1 && blob.source == 2) {
            blob.x += 1;
        }
    }
    CHECK(unmet(scene, believed).contains("pairs"));
}

TEST_CASE("A pair whose echoes lie beside stronger ones is not taken for misplaced") {
    EchoScene scene;
    // The echoes of a02 in a01 are negative, and so are those of a04 that are put 4 px beside them:
    // the true response grows from each towards its neighbour.
    for (std::size_t i = 0; i < 3; ++i) {
        const Blob& weak = scene.blobs[i];
        scene.add({weak.victim, 3, weak.x + 4, weak.y, 4.0 * weak.response});
    }
    CHECK_FALSE(unmet(scene, scene.blobs).contains("pairs"));
}

TEST_CASE("All echoes shifted by two pixels fail as pixels") {
    const EchoScene scene;
    std::vector<Blob> believed = scene.blobs;
    for (Blob& blob : believed) {
        blob.y -= 2;
    }
    const Names names = unmet(scene, believed);
    CHECK(names.contains("pixel_completeness"));
    CHECK(names.contains("pairs"));
}

TEST_CASE("A pair of inverted sign is found out, however few its pixels are") {
    const EchoScene scene;
    std::vector<Blob> believed = scene.blobs;
    for (Blob& blob : believed) {
        if (blob.victim == 3 && blob.source == 0) {
            blob.response = -blob.response;
        }
    }
    const Names names = unmet(scene, believed);
    CHECK(names.contains("pairs"));
    CHECK(names.contains("echo_completeness"));
    CHECK_FALSE(names.contains("slope"));
}

TEST_CASE("One amplifier's gain, wrong by 10 %, is found out by the slope of what it receives") {
    const EchoScene scene;
    for (const double factor : {1.1, 0.9}) {
        FoundDetector found = scene.mask_of(scene.blobs);
        for (std::size_t i = 0; i < scene.blobs.size(); ++i) {
            found.marks[i].peak_e *= scene.blobs[i].victim == 2 ? factor : 1.0;
            // A good product's errors, 0.5 %: three pairs leave 0.3 %, a tenth is 33 of these.
            found.marks[i].error_e = 0.005 * std::abs(found.marks[i].peak_e);
        }
        CHECK(unmet(scene, found) == Names{"amplifier_slopes"});
    }
}

TEST_CASE("A wrong gain in the DETECTION table is found out though no echo shows it") {
    const EchoScene scene;
    FoundDetector found = scene.mask_of(scene.blobs);
    found.amplifiers[1].gain_e_per_adu *= 1.1;
    CHECK(unmet(scene, found) == Names{"amplifier_gains"});
    found.amplifiers.clear();
    CHECK(unmet(scene, found) == Names{"amplifier_gains"});
}

TEST_CASE("All strengths doubled fail by slope and by area") {
    const EchoScene scene;
    std::vector<Blob> believed = scene.blobs;
    for (Blob& blob : believed) {
        blob.response *= 2.0;
    }
    const Names names = unmet(scene, believed);
    CHECK(names.contains("slope"));
    CHECK(names.contains("area_ratio"));
}

TEST_CASE("All strengths halved fail by slope and by completeness") {
    const EchoScene scene;
    std::vector<Blob> believed = scene.blobs;
    for (Blob& blob : believed) {
        blob.response *= 0.5;
    }
    const Names names = unmet(scene, believed);
    CHECK(names.contains("slope"));
    CHECK(names.contains("pixel_completeness"));
}

TEST_CASE("Flags where nothing is cost area") {
    const EchoScene scene;
    std::vector<Blob> believed = scene.blobs;
    for (const Blob& blob : scene.blobs) {
        Blob phantom = blob;
        phantom.x += 16;
        phantom.response = 5.0;
        believed.push_back(phantom);
    }
    CHECK(unmet(scene, believed) == Names{"area_ratio"});
}

TEST_CASE("Everything flagged does not pass") {
    const EchoScene scene;
    FoundDetector found = scene.mask_of(scene.blobs);
    for (std::int16_t& bits : found.bits) {
        bits = static_cast<std::int16_t>(test::kPositive | test::kNegative);
    }
    const Names names = unmet(scene, found);
    CHECK(names.contains("pixel_completeness"));
    CHECK(names.contains("area_ratio"));
}

TEST_CASE("Marks that rest on a prior do not prove a strength") {
    const EchoScene scene;
    FoundDetector found = scene.mask_of(scene.blobs);
    for (FoundMark& mark : found.marks) {
        mark.measured = false;
    }
    CHECK(unmet(scene, found).contains("slope"));
}

TEST_CASE("One mark for two blended echoes is compared with the stronger") {
    const EchoScene scene;
    FoundDetector found = scene.mask_of(scene.blobs);
    // The first two echoes of a pair, of response 3 and 6, as one mark over both.
    found.marks[1].box = found.marks[0].box.united(found.marks[1].box);
    found.marks.erase(found.marks.begin());
    CHECK(unmet(scene, found).empty());
}

TEST_CASE("A missing mask counts as missed and is said") {
    const EchoScene scene;
    const Tally tally = score_detector(scene.truth, true_response(scene.truth, 0), {});
    const NightScore night = night_score("crosstalk", {{"e1", "no mask", tally}});
    CHECK_FALSE(is_complete(night));
    CHECK(night.total.pixels.required_flagged == 0);
    CHECK_FALSE(all_met(night.figures));
    CHECK(table_of(night).find("no mask for 1 of 1 detectors") != std::string::npos);
}

TEST_CASE("A night is the sum of its exposures") {
    const EchoScene scene;
    const std::vector<float> response = true_response(scene.truth, 0);
    const Tally good = score_detector(scene.truth, response, scene.mask_of(scene.blobs));
    const Tally none = score_detector(scene.truth, response, {});
    const NightScore night = night_score("crosstalk", {{"e1", "", good}, {"e2", "gone", none}});
    CHECK(night.total.pixels.required == 2 * good.pixels.required);
    CHECK(night.total.echoes.echoes.size() == 72);
    CHECK(night.figures.front().value == Approx(0.5));
}

}  // namespace
}  // namespace straymark::score
