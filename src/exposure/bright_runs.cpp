#include "exposure/bright_runs.h"

#include <algorithm>
#include <cmath>
#include <limits>

namespace straymark {
namespace {

/// Pixels that are looked at together; most blocks hold nothing bright.
constexpr int kBlock = 32;

/// Lengthens the last span of `spans` by the pixel, or begins another.
void extend(std::vector<ReadoutSpan>& spans, int row, int tick) {
    if (!spans.empty() && spans.back().row == row &&
        spans.back().tick + spans.back().length == tick) {
        ++spans.back().length;
    } else {
        spans.push_back({row, tick, 1});
    }
}

void extend(AmplifierDigest& digest, int row, int tick, float value) {
    auto& runs = digest.runs;
    if (!runs.empty() && runs.back().row == row && runs.back().tick + runs.back().length == tick) {
        ++runs.back().length;
    } else {
        runs.push_back({row, tick, 1, static_cast<std::uint32_t>(digest.values.size())});
    }
    digest.values.push_back(value);
}

bool any_at_or_above(const float* values, int count, float floor) {
    int found = 0;
    for (int k = 0; k < count; ++k) {
        found |= static_cast<int>(values[k] >= floor);
    }
    return found != 0;
}

bool any_odd(const float* raw, int count, float saturation) {
    int found = 0;
    for (int k = 0; k < count; ++k) {
        found |= static_cast<int>(!(raw[k] < saturation));  // saturated or NaN
    }
    return found != 0;
}

/// One block: `raw` before subtraction, `signal` after; first pixel at (tick, row).
void collect_block(const float* raw, const float* signal, int count, ReadoutIndex first,
                   float saturation, float floor, AmplifierDigest& digest) {
    for (int k = 0; k < count; ++k) {
        const int tick = first.tick + k;
        if (std::isnan(raw[k])) {
            extend(digest.invalid, first.row, tick);
            continue;
        }
        const bool saturated = raw[k] >= saturation;
        if (saturated) {
            extend(digest.saturated, first.row, tick);
        }
        if (saturated || signal[k] >= floor) {
            extend(digest, first.row, tick, signal[k]);
        }
    }
}

}  // namespace

float saturation_as_float(double saturation_adu) {
    const auto nearest = static_cast<float>(saturation_adu);
    return double(nearest) < saturation_adu
               ? std::nextafter(nearest, std::numeric_limits<float>::infinity())
               : nearest;
}

PixelCensus take_census(const AmplifierPlane& raw, float saturation_adu) {
    PixelCensus census;
    for (int r = 0; r < raw.rows; ++r) {
        const float* row = raw.row(r);
        int below = 0;
        int saturated = 0;
        for (int t = 0; t < raw.ticks; ++t) {
            below += static_cast<int>(row[t] < saturation_adu);
            saturated += static_cast<int>(row[t] >= saturation_adu);
        }
        census.valid += below + saturated;
        census.saturated += saturated;
    }
    return census;
}

void subtract_and_collect(AmplifierPlane& plane, const BiasLevels& bias, const SkyMesh& sky,
                          float saturation_adu, AmplifierDigest& digest) {
    // Rounded down, so that no pixel that the floor in double precision would keep is lost.
    auto floor = static_cast<float>(digest.floor_adu);
    if (double(floor) > digest.floor_adu) {
        floor = std::nextafter(floor, -std::numeric_limits<float>::infinity());
    }
    std::vector<float> raw(static_cast<std::size_t>(plane.ticks));
    std::vector<float> pedestal(static_cast<std::size_t>(plane.ticks));
    for (int r = 0; r < plane.rows; ++r) {
        float* row = plane.row(r);
        std::copy_n(row, plane.ticks, raw.data());
        sky.fill_row(r, pedestal.data());
        const float level = bias.rows[r];
        for (int t = 0; t < plane.ticks; ++t) {
            row[t] = raw[t] - level - pedestal[t];
        }
        for (int t = 0; t < plane.ticks; t += kBlock) {
            const int count = std::min(kBlock, plane.ticks - t);
            if (any_at_or_above(row + t, count, floor) ||
                any_odd(raw.data() + t, count, saturation_adu)) {
                collect_block(raw.data() + t, row + t, count,
                              {plane.first_tick + t, plane.first_row + r}, saturation_adu, floor,
                              digest);
            }
        }
    }
}

void blank_saturated(AmplifierPlane& plane, const AmplifierDigest& digest) {
    for (const ReadoutSpan& span : digest.saturated) {
        float* first = plane.row(span.row - plane.first_row) + (span.tick - plane.first_tick);
        std::fill_n(first, span.length, std::numeric_limits<float>::quiet_NaN());
    }
}

}  // namespace straymark
