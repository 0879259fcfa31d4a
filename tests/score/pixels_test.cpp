#include "score/pixels.h"

#include <algorithm>
#include <catch2/catch.hpp>
#include <numeric>

#include "score/scene.h"

namespace straymark::score {
namespace {

using namespace test;

/// A 40 x 20 detector; responses and bits are set pixel by pixel.
struct Bench {
    TrueDetector truth = empty_detector(40, 20, 10.0, gaussian_psf(1.5, 5));
    std::vector<float> response = std::vector<float>(800, 0.0F);
    FoundDetector found = empty_mask(truth);

    void pixel(int x, int y, float true_response, std::int32_t bits) {
        response[static_cast<std::size_t>(y * 40 + x)] = true_response;
        found.bits[static_cast<std::size_t>(y * 40 + x)] = static_cast<std::int16_t>(bits);
    }
    [[nodiscard]] PixelTally tally(const std::vector<bool>& mark_has_echo = {}) const {
        return tally_pixels(truth, response, found, mark_has_echo);
    }
};

std::int64_t missed(const PixelTally& tally, MissReason reason) {
    return tally.missed[static_cast<std::size_t>(reason)];
}
std::int64_t false_of(const PixelTally& tally, FalseReason reason) {
    return tally.falsely_flagged[static_cast<std::size_t>(reason)];
}
template <typename Counts>
std::int64_t sum(const Counts& counts) {
    return std::accumulate(counts.begin(), counts.end(), std::int64_t{0});
}

TEST_CASE("Pixels are counted in the bin of their response's magnitude") {
    Bench bench;
    bench.pixel(1, 1, 0.49F, 0);
    bench.pixel(2, 1, 0.5F, 0);
    bench.pixel(3, 1, -1.5F, kNegative);
    bench.pixel(4, 1, 1.6F, kUnassessed);
    bench.pixel(5, 1, 1.7F, kMarginal);
    bench.pixel(6, 1, 50.0F, kPositive);
    const PixelTally tally = bench.tally();
    CHECK(tally.pixels == 800);
    CHECK(tally.bins[0].pixels == 1);
    const ResponseBin& from_one_and_a_half = tally.bins[4];
    CHECK(from_one_and_a_half.pixels == 3);
    CHECK(from_one_and_a_half.flagged == 1);
    CHECK(from_one_and_a_half.unassessed == 1);
    CHECK(from_one_and_a_half.marginal == 1);
    CHECK(tally.bins.back().pixels == 1);
    CHECK(tally.bins.back().flagged == 1);
    CHECK(tally.required == 4);
    CHECK(tally.required_flagged == 2);
    CHECK(tally.true_area == 4);
    CHECK(tally.flagged_area == 2);
    CHECK(tally.marginal == 1);
    CHECK(tally.unassessed == 1);
}

TEST_CASE("Only the bit of the response's sign counts, alone") {
    Bench bench;
    bench.pixel(1, 1, 3.0F, kNegative);
    bench.pixel(2, 1, -3.0F, kPositive);
    bench.pixel(3, 1, 3.0F, kPositive | kNegative);
    const PixelTally tally = bench.tally();
    CHECK(tally.required_flagged == 0);
    CHECK(missed(tally, MissReason::wrong_sign) == 3);
    CHECK(false_of(tally, FalseReason::wrong_sign) == 3);
    CHECK(tally.flagged_area == 3);
}

TEST_CASE("A file without the bits flags nothing") {
    Bench bench;
    bench.pixel(1, 1, 3.0F, kPositive);
    bench.found.values = {};
    CHECK(bench.tally().required_flagged == 0);
}

TEST_CASE("Every missed pixel is counted once, by its reason") {
    Bench bench;
    bench.found.marks = {{"d1/a01", true, 20.0, 10.0, {18, 8, 23, 13}, 1.0, 1.0}};
    bench.pixel(1, 1, 2.0F, 1);                        // saturated
    bench.pixel(2, 1, 2.0F, 2 | kUnassessed);          // bleed comes first
    bench.pixel(3, 1, 2.0F, 128);                      // defect
    bench.pixel(4, 1, 2.0F, kUnassessed | kMarginal);  // unassessed comes first
    bench.pixel(5, 1, 2.0F, kMarginal);
    bench.pixel(20, 10, 2.0F, 0);  // in the mark's box
    bench.pixel(25, 10, 2.0F, 0);  // 3 px beside it
    bench.pixel(26, 10, 2.0F, 0);  // 4 px beside it
    PixelTally tally = bench.tally({true});
    CHECK(missed(tally, MissReason::saturated_or_bleed) == 2);
    CHECK(missed(tally, MissReason::defect) == 1);
    CHECK(missed(tally, MissReason::unassessed) == 1);
    CHECK(missed(tally, MissReason::marginal) == 1);
    CHECK(missed(tally, MissReason::beside_mark) == 2);
    CHECK(missed(tally, MissReason::no_mark) == 1);
    CHECK(sum(tally.missed) == tally.required - tally.required_flagged);

    bench.found.amplifiers.front().usable = false;
    tally = bench.tally({true});
    CHECK(missed(tally, MissReason::amplifier_unusable) == 8);

    bench.found = {};
    tally = bench.tally();
    CHECK(missed(tally, MissReason::no_mask) == 8);
    CHECK(sum(tally.missed) == 8);
}

TEST_CASE("Every falsely flagged pixel is counted once, by its reason") {
    Bench bench;
    bench.found.marks = {{"d1/a01", true, 5.0, 5.0, {3, 3, 8, 8}, 1.0, 1.0},
                         {"d1/a01", true, 20.0, 5.0, {18, 3, 23, 8}, 1.0, 1.0}};
    bench.pixel(5, 5, 0.1F, kPositive);    // in a mark where no echo is
    bench.pixel(20, 5, 0.1F, kPositive);   // in a mark that has one: nothing true near all the same
    bench.pixel(30, 10, 1.2F, kPositive);  // true
    bench.pixel(31, 10, 0.6F, kPositive);  // just below
    bench.pixel(33, 13, 0.2F, kPositive);  // 3 px from the true one
    bench.pixel(34, 10, 0.2F, kPositive);  // 4 px
    const PixelTally tally = bench.tally({false, true});
    CHECK(false_of(tally, FalseReason::mark_without_echo) == 1);
    CHECK(false_of(tally, FalseReason::just_below) == 1);
    CHECK(false_of(tally, FalseReason::beside_true) == 1);
    CHECK(false_of(tally, FalseReason::nothing_near) == 2);
    CHECK(sum(tally.falsely_flagged) == tally.flagged_area - 1);
}

TEST_CASE("Boxes of any size and place are taken as far as they lie on the detector") {
    Bench bench;
    bench.pixel(39, 19, 2.0F, 0);
    bench.found.marks = {
        {"d1/a01", true, 0.0, 0.0, {-1000000, -1000000, 1000000, 1000000}, 1.0, 1.0},
        {"d1/a01", true, 0.0, 0.0, {50, 50, 40, 40}, 1.0, 1.0}};
    CHECK(missed(bench.tally({true, true}), MissReason::beside_mark) == 1);
}

}  // namespace
}  // namespace straymark::score
