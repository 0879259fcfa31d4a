#include "artifacts/crosstalk/predict.h"

#include <catch2/catch.hpp>
#include <cmath>

#include "core/error.h"
#include "support/crosstalk_scene.h"

using namespace straymark;
using namespace straymark::test;

namespace {

/// Where tick t (data ticks from 0) and row r of an amplifier's section lie: an own walk over the
/// section, by its corner, so that a mistake in the read-out geometry shows.
DetectorPixel walked(const Detector& detector, int amplifier, int t, int r) {
    const PixelBox box = detector.amplifiers[static_cast<std::size_t>(amplifier)].readout.section();
    const bool right = amplifier % 2 == 1;
    const bool top = amplifier >= 2;
    const int along_x = detector.serial == SerialAxis::x ? t : r;
    const int along_y = detector.serial == SerialAxis::x ? r : t;
    return {right ? box.x1 - 1 - along_x : box.x0 + along_x,
            top ? box.y1 - 1 - along_y : box.y0 + along_y};
}

double number_at(const ProductTable& table, const std::string& column, std::size_t row) {
    return std::visit(
        [row](const auto& values) -> double {
            if constexpr (std::is_same_v<typename std::decay_t<decltype(values)>::value_type,
                                         std::string>) {
                return 0.0;
            } else {
                return static_cast<double>(values[row]);
            }
        },
        table.columns.at(column));
}

const std::string& text_at(const ProductTable& table, const std::string& column, std::size_t row) {
    return std::get<std::vector<std::string>>(table.columns.at(column))[row];
}

/// The echo on one detector, densely, from the pictures and the product's rows alone:
/// d_v(c, r) = sum_s sum_l h_l S(c - l, r) + bend(S), the clipped value replacing lag 0 and bend.
std::vector<double> dense_echo(const Scene& scene, int detector, double floor_adu) {
    std::vector<double> echo(static_cast<std::size_t>(kSide * kSide), 0.0);
    const Detector& described = scene.camera.detectors[static_cast<std::size_t>(detector)];
    const ProductTable& pairs = scene.product.tables.at("PAIRS");
    const ProductTable& lags = scene.product.tables.at("LAGS");
    const ProductTable& bends = scene.product.tables.at("BENDS");
    for (std::size_t row = 0; row < pairs.rows; ++row) {
        const std::string& victim = text_at(pairs, "victim", row);
        const std::string& source = text_at(pairs, "source", row);
        if (victim.substr(0, 2) != described.id) {
            continue;
        }
        const int v = victim[4] - '1';
        const auto& picture = scene.pictures.at({source[1] - '1', source[4] - '1'});
        std::map<int, double> coefficients{{0, number_at(pairs, "coefficient", row)}};
        for (std::size_t i = 0; i < lags.rows; ++i) {
            if (text_at(lags, "victim", i) == victim && text_at(lags, "source", i) == source) {
                coefficients[static_cast<int>(number_at(lags, "lag", i))] =
                    number_at(lags, "coefficient", i);
            }
        }
        std::size_t bend = bends.rows;
        for (std::size_t i = 0; i < bends.rows; ++i) {
            if (text_at(bends, "victim", i) == victim && text_at(bends, "source", i) == source) {
                bend = i;
            }
        }
        const double gain = described.amplifiers[static_cast<std::size_t>(v)].gain_e_per_adu;
        for (int r = 0; r < 60; ++r) {
            for (int c = 0; c < 60; ++c) {
                for (const auto& [lag, h] : coefficients) {
                    const int from = c - lag;
                    if (from < 0 || from >= 60) {
                        continue;
                    }
                    const auto level = static_cast<double>(
                        picture[static_cast<std::size_t>(r)][static_cast<std::size_t>(from)]);
                    if (level < floor_adu) {
                        continue;
                    }
                    double value = h * level;
                    if (lag == 0 && bend < bends.rows) {
                        const double onset = number_at(bends, "onset_adu", bend);
                        if (level >= kSaturation) {
                            value = number_at(bends, "clipped", bend) * level;
                        } else if (std::isfinite(onset) && level > onset) {
                            const double x = level - onset;
                            value += number_at(bends, "c1", bend) * x +
                                     number_at(bends, "c2", bend) * x * x +
                                     number_at(bends, "c3", bend) * x * x * x;
                        }
                    }
                    const DetectorPixel at = walked(described, v, c, r);
                    echo[static_cast<std::size_t>(at.y * kSide + at.x)] += value * gain;
                }
            }
        }
    }
    return echo;
}

struct Windows {
    std::vector<float> measured = std::vector<float>(kSide * kSide, 0.0F);
    std::vector<float> unmeasured = measured, variance = measured, unmeasured_variance = measured;
    FaintWindows faint() {
        const PixelBox box{0, 0, kSide, kSide};
        return {{box, measured}, {box, unmeasured}, {box, variance}, {box, unmeasured_variance}};
    }
};

/// All that the marks say about one detector, summed.
std::vector<float> summed(const DetectorMarks& marks) {
    Windows windows;
    if (marks.faint) {
        marks.faint->add_to(windows.faint());
    }
    for (const Mark& mark : marks.marks) {
        if (mark.signal) {
            mark.signal->add_to({{0, 0, kSide, kSide}, windows.measured}, 1.0F);
        }
    }
    return windows.measured;
}

/// A threshold so low that nothing is too faint to be summed.
const DetectionContext kEverything{1e-7, 0, 0.0};

}  // namespace

TEST_CASE("listed and faint echoes together are the dense sum over all pairs, lags and bends") {
    for (const unsigned seed : {1U, 2U, 3U}) {
        const Scene scene = random_scene(seed);
        const auto predictor = crosstalk::make_predictor(scene.camera, scene.product);
        for (const double threshold : {1e-7, 1e-4}) {
            const DetectionContext context{threshold, 0, 0.0};
            const auto prediction = predictor->predict(scene.digest, context, 2);
            for (int detector = 0; detector < 2; ++detector) {
                const std::vector<double> expected = dense_echo(scene, detector, 50.0);
                const std::vector<float> found = summed(prediction->marks_on(detector));
                double worst = 0.0;
                double largest = 0.0;
                for (std::size_t i = 0; i < expected.size(); ++i) {
                    worst = std::max(worst, std::abs(expected[i] - static_cast<double>(found[i])));
                    largest = std::max(largest, std::abs(expected[i]));
                }
                // Single precision over some tens of terms of at most 60 e.
                CHECK(worst < 1e-4);
                CHECK(largest > 10.0);
            }
        }
    }
}

TEST_CASE("what is left out as too faint responds with no more than the stated bound") {
    const Scene scene = random_scene(4);
    const auto predictor = crosstalk::make_predictor(scene.camera, scene.product);
    const auto prediction = predictor->predict(scene.digest, {1.0, 0, 0.0}, 1);
    for (int detector = 0; detector < 2; ++detector) {
        const DetectorMarks marks = prediction->marks_on(detector);
        const std::vector<double> expected = dense_echo(scene, detector, 50.0);
        const std::vector<float> found = summed(marks);
        const Detector& described = scene.camera.detectors[static_cast<std::size_t>(detector)];
        double worst = 0.0;
        for (int y = 0; y < kSide; ++y) {
            for (int x = 0; x < kSide; ++x) {
                const auto a = static_cast<std::size_t>((x >= 60 ? 1 : 0) + (y >= 60 ? 2 : 0));
                const auto at = static_cast<std::size_t>(y * kSide + x);
                const double noise = 10.0 * described.amplifiers[a].gain_e_per_adu;
                const double plateau =
                    std::abs(expected[at] - static_cast<double>(found[at])) / noise *
                    std::sqrt(scene.digest.detectors[0].psf.noise_equivalent_area_px);
                worst = std::max(worst, plateau);
            }
        }
        // Seven sources may each leave out kTruncation of the threshold at one place.
        CHECK(worst <= 7.0 * crosstalk::kTruncation);
        CHECK(marks.assessment.truncation_response >= crosstalk::kTruncation);
        CHECK(marks.assessment.state == AssessmentState::assessed);
    }
}

TEST_CASE("a mark names its source amplifier, its place there, its strength and its error") {
    Scene scene = random_scene(5);
    for (auto& detector : scene.digest.detectors) {
        for (auto& amplifier : detector.amplifiers) {
            amplifier.runs.clear();
            amplifier.values.clear();
            amplifier.saturated.clear();
        }
    }
    ClockPicture picture(60, std::vector<float>(60, 0.0F));
    picture[20][30] = 40000.0F;  // row 20, data tick 30 of d1/a2 (lower right corner)
    scene.digest.detectors[0].amplifiers[1] = digest_of_picture(picture, 10.0, 50.0);
    scene.product = product_of({{"d1/a4", "d1/a2", 1e-3, 2e-5}});
    scene.product.tables["PRIORS"].columns["spread"] = std::vector<double>{0.0, 0.0, 0.0};
    const auto predictor = crosstalk::make_predictor(scene.camera, scene.product);
    const DetectorMarks marks = predictor->predict(scene.digest, {1.0, 0, 0.0}, 1)->marks_on(0);
    REQUIRE(marks.marks.size() == 1);
    const Mark& mark = marks.marks.front();
    CHECK(mark.cause.source == "d1/a2");
    CHECK(mark.cause.source_x_px == 119 - 30);
    CHECK(mark.cause.source_y_px == 20);
    // Victim d1/a4: upper right corner, gain 1.6: same tick and row from there.
    CHECK(mark.signal->bounds() == PixelBox{119 - 30, 119 - 20, 119 - 30 + 1, 119 - 20 + 1});
    CHECK(mark.strength_e == Approx(40000.0 * 1e-3 * 1.6));
    CHECK(mark.strength_error_e == Approx(40000.0 * 2e-5 * 1.6));
    CHECK(mark.measured);
}

TEST_CASE("an offset between two amplifiers delays the echo by whole ticks") {
    Scene scene = random_scene(6);
    for (auto& amplifier : scene.digest.detectors[0].amplifiers) {
        amplifier.runs.clear();
    }
    for (auto& amplifier : scene.digest.detectors[1].amplifiers) {
        amplifier.runs.clear();
    }
    ClockPicture picture(60, std::vector<float>(60, 0.0F));
    picture[10][58] = 40000.0F;
    picture[11][30] = 40000.0F;
    scene.digest.detectors[0].amplifiers[0] = digest_of_picture(picture, 10.0, 50.0);
    scene.product = product_of({{"d1/a2", "d1/a1", 1e-3, 0.0}});
    scene.product.tables["PRIORS"].columns["spread"] = std::vector<double>{0.0, 0.0, 0.0};
    scene.camera.pair_offset_ticks[{{0, 0}, {0, 1}}] = 4;
    const auto predictor = crosstalk::make_predictor(scene.camera, scene.product);
    const DetectorMarks marks = predictor->predict(scene.digest, kEverything, 1)->marks_on(0);
    // Tick 58 + 4 falls into overscan and has no pixel; tick 30 + 4 counts from the right edge.
    REQUIRE(marks.marks.size() == 1);
    CHECK(marks.marks.front().signal->bounds() == PixelBox{119 - 34, 11, 119 - 34 + 1, 12});
}

TEST_CASE("strength zero gives no marks") {
    Scene scene = random_scene(7);
    std::vector<PairRow> rows;
    for (const std::string& victim : amplifier_names(scene.camera)) {
        for (const std::string& source : amplifier_names(scene.camera)) {
            if (victim != source) {
                rows.push_back({victim, source, 0.0, 0.0, "zero"});
            }
        }
    }
    scene.product = product_of(rows);
    const auto predictor = crosstalk::make_predictor(scene.camera, scene.product);
    const DetectorMarks marks = predictor->predict(scene.digest, kEverything, 1)->marks_on(0);
    CHECK(marks.marks.empty());
    CHECK(marks.faint == nullptr);
    CHECK(marks.regions.empty());
}

TEST_CASE("a pair without a row takes its stratum's prior and is not measured") {
    Scene scene = random_scene(8);
    scene.product = product_of({});
    const auto predictor = crosstalk::make_predictor(scene.camera, scene.product);
    const DetectorMarks marks = predictor->predict(scene.digest, {0.05, 0, 0.0}, 1)->marks_on(0);
    REQUIRE_FALSE(marks.marks.empty());
    for (const Mark& mark : marks.marks) {
        CHECK_FALSE(mark.measured);
        CHECK(mark.signal == nullptr);  // the prior's mean is zero
        REQUIRE(mark.errors.size() == 1);
    }
}

TEST_CASE("an amplifier without pixels leaves its victims unassessed only where it could matter") {
    Scene scene = random_scene(9);
    scene.digest.detectors[0].amplifiers[1].state = AmplifierState::missing;
    scene.digest.detectors[0].amplifiers[1].reason = "no HDU";
    scene.digest.detectors[0].amplifiers[1].runs.clear();
    // 60000 ADU times 1e-3 matters to 10 ADU of noise, times 1e-6 it does not.
    scene.product = product_of({{"d1/a1", "d1/a2", 1e-3, 0.0}, {"d1/a3", "d1/a2", 1e-6, 0.0}});
    scene.product.tables["PRIORS"].columns["spread"] = std::vector<double>{0.0, 0.0, 0.0};
    const auto predictor = crosstalk::make_predictor(scene.camera, scene.product);
    const DetectorMarks marks = predictor->predict(scene.digest, {1.0, 0, 0.0}, 1)->marks_on(0);
    const auto covers = [&](int x, int y) {
        return std::any_of(marks.regions.begin(), marks.regions.end(),
                           [&](const UnassessedRegion& r) { return r.box.contains(x, y); });
    };
    CHECK(covers(10, 10));         // a1
    CHECK(covers(100, 10));        // a2 itself: no noise, no decision
    CHECK_FALSE(covers(10, 100));  // a3
    CHECK(marks.assessment.state == AssessmentState::partly);
    CHECK(marks.assessment.reason.find("no HDU") != std::string::npos);
}

TEST_CASE("without a point-spread function the whole detector is unassessed, with the reason") {
    Scene scene = random_scene(10);
    scene.digest.detectors[1].psf = {};
    const auto predictor = crosstalk::make_predictor(scene.camera, scene.product);
    const DetectorMarks marks = predictor->predict(scene.digest, {1.0, 0, 0.0}, 1)->marks_on(1);
    REQUIRE(marks.regions.size() == 1);
    CHECK(marks.regions[0].box == PixelBox{0, 0, kSide, kSide});
    CHECK(marks.assessment.state == AssessmentState::unassessed);
}

TEST_CASE("a product that does not fit is refused with table, row and what was expected") {
    const Scene scene = random_scene(11);
    const auto message = [&](const Product& product) -> std::string {
        try {
            crosstalk::make_predictor(scene.camera, product);
        } catch (const InputError& error) {
            return error.what();
        }
        return "accepted";
    };
    Product other = product_of({});
    other.camera = "someone-elses";
    CHECK(message(other).find("someone-elses") != std::string::npos);
    CHECK(message(product_of({{"d1/a1", "d9/a1", 1e-4, 1e-6}})).find("row 1") != std::string::npos);
    CHECK(message(product_of({{"d1/a1", "d1/a1", 1e-4, 1e-6}})).find("another amplifier") !=
          std::string::npos);
    CHECK(message(product_of({{"d1/a1", "d1/a2", 1e-4, 1e-6}, {"d1/a1", "d1/a2", 1e-4, 1e-6}}))
              .find("second time") != std::string::npos);
    CHECK(message(product_of({{"d1/a1", "d1/a2", std::nan(""), 1e-6}})).find("finite") !=
          std::string::npos);
    CHECK(message(product_of({{"d1/a1", "d1/a2", 1e-4, -1e-6}})).find("0 or more") !=
          std::string::npos);
    CHECK(message(product_of({{"d1/a1", "d1/a2", 1e-4, 1e-6, "perhaps"}})).find("perhaps") !=
          std::string::npos);
    Product without_priors = product_of({});
    without_priors.tables.erase("PRIORS");
    CHECK(message(without_priors).find("prior") != std::string::npos);
    Camera two_clocks = scene.camera;
    two_clocks.detectors[1].amplifiers[0].clock = "other";
    CHECK_THROWS_WITH(
        crosstalk::make_predictor(two_clocks, product_of({{"d1/a1", "d2/a1", 1e-4, 1e-6}})),
        Catch::Contains("in step"));
}
