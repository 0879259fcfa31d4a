#include <catch2/catch.hpp>
#include <cmath>
#include <map>
#include <random>

#include "exposure/bright_runs.h"

using namespace straymark;

namespace {

constexpr float kSaturation = 900.0F;

/// Random raw values, many near the floor, with runs of NaN and of saturation.
AmplifierPlane random_plane(int ticks, int rows, std::uint64_t seed) {
    std::mt19937_64 engine(seed);
    std::uniform_real_distribution<float> uniform;
    AmplifierPlane plane;
    plane.first_tick = 7;
    plane.first_row = 3;
    plane.ticks = ticks;
    plane.rows = rows;
    float mood = 0.0F;
    for (int k = 0; k < ticks * rows; ++k) {
        if (uniform(engine) < 0.1F) {
            mood = uniform(engine);
        }
        const float value = 100.0F + 30.0F * uniform(engine);
        plane.values.push_back(mood < 0.05F  ? NAN
                               : mood < 0.1F ? kSaturation + std::floor(3.0F * uniform(engine)) - 1
                               : mood < 0.4F ? value + 50.0F
                                             : value);
    }
    return plane;
}

std::map<std::pair<int, int>, float> values_of(const AmplifierDigest& digest) {
    std::map<std::pair<int, int>, float> values;
    for (const ReadoutRun& run : digest.runs) {
        for (int k = 0; k < run.length; ++k) {
            values[{run.row, run.tick + k}] = digest.values[run.first_value + k];
        }
    }
    return values;
}

template <typename Span>
bool ordered_and_apart(const std::vector<Span>& spans) {
    for (std::size_t k = 1; k < spans.size(); ++k) {
        const Span& a = spans[k - 1];
        const Span& b = spans[k];
        if (!(a.row < b.row || (a.row == b.row && a.tick + a.length < b.tick))) {
            return false;
        }
    }
    return true;
}

bool holds(const std::vector<ReadoutSpan>& spans, int row, int tick) {
    return std::any_of(spans.begin(), spans.end(), [&](const ReadoutSpan& span) {
        return span.row == row && tick >= span.tick && tick < span.tick + span.length;
    });
}

}  // namespace

TEST_CASE("runs hold every pixel at or above the floor or saturated, and no other") {
    for (const int ticks : {5, 32, 33, 100}) {
        const AmplifierPlane raw = random_plane(ticks, 20, static_cast<std::uint64_t>(ticks));
        BiasLevels bias;
        for (int r = 0; r < raw.rows; ++r) {
            bias.rows.push_back(90.0F + static_cast<float>(r % 3));
        }
        const SkyMesh sky(ticks, raw.rows, 1, 1, {20.0F});
        AmplifierDigest digest;
        digest.floor_adu = 25.0;
        AmplifierPlane plane = raw;
        subtract_and_collect(plane, bias, sky, kSaturation, digest);

        const auto values = values_of(digest);
        CHECK(ordered_and_apart(digest.runs));
        CHECK(ordered_and_apart(digest.saturated));
        CHECK(ordered_and_apart(digest.invalid));
        for (int r = 0; r < raw.rows; ++r) {
            for (int t = 0; t < ticks; ++t) {
                const float value = raw.at(t, r);
                const float signal = value - bias.rows[r] - 20.0F;
                const int row = r + raw.first_row;
                const int tick = t + raw.first_tick;
                const auto found = values.find({row, tick});
                const bool kept = signal >= 25.0F || value >= kSaturation;
                REQUIRE((found != values.end()) == kept);
                if (kept) {
                    CHECK(found->second == Approx(signal));
                }
                CHECK(holds(digest.saturated, row, tick) == (value >= kSaturation));
                CHECK(holds(digest.invalid, row, tick) == std::isnan(value));
            }
        }
    }
}

TEST_CASE("a saturated pixel is kept even where its signal is below the floor") {
    AmplifierPlane plane;
    plane.ticks = 4;
    plane.rows = 1;
    plane.values = {0.0F, 1000.0F, 0.0F, 0.0F};
    BiasLevels bias;
    bias.rows = {2000.0F};
    AmplifierDigest digest;
    digest.floor_adu = 10.0;
    subtract_and_collect(plane, bias, SkyMesh(4, 1, 1, 1, {0.0F}), 1000.0F, digest);
    REQUIRE(digest.runs.size() == 1);
    CHECK(digest.runs.front() == ReadoutRun{0, 1, 1, 0});
    CHECK(digest.values.front() == -1000.0F);
    CHECK(digest.saturated == std::vector<ReadoutSpan>{{0, 1, 1}});
}

TEST_CASE("comparing with the saturation as a float is comparing with the number itself") {
    // 16777217 and 0.1 are not floats: the next ones below do not reach them.
    for (const double saturation : {16777217.0, 0.1, 60000.0, 65535.5}) {
        const float limit = saturation_as_float(saturation);
        CHECK(double(limit) >= saturation);
        CHECK(double(std::nextafter(limit, 0.0F)) < saturation);
    }
}
