#include "exposure/bias.h"

#include <algorithm>
#include <cmath>
#include <limits>
#include <numeric>
#include <span>

#include "core/robust.h"

namespace straymark {
namespace {

/// Ticks after the data that may hold deferred charge and echoes with a lag.
constexpr int kTrailTicks = 4;
/// More columns than this do not lower the error of a level that is smoothed over 31 rows anyway.
constexpr int kMostColumns = 64;
/// Rows to either side in the running median; near the ends the window stays centred but keeps
/// kLeastHalfWindow.
constexpr int kHalfWindow = 15;
constexpr int kLeastHalfWindow = 3;
constexpr double kClipSigma = 3.0;
constexpr float kNaN = std::numeric_limits<float>::quiet_NaN();

/// Strips (in read-out indices) that share rows with the data.
std::vector<PixelBox> serial_strips(const AmplifierFrame& frame, const AmplifierPlane& plane,
                                    const std::vector<PixelBox>& boxes) {
    const int end_tick = plane.first_tick + plane.ticks;
    std::vector<PixelBox> strips;
    for (const PixelBox& box : boxes) {
        if (box.empty()) {
            continue;
        }
        PixelBox strip = readout_box(frame, box);
        strip.y0 = std::max(strip.y0, plane.first_row);
        strip.y1 = std::min(strip.y1, plane.first_row + plane.rows);
        if (strip.empty()) {
            continue;
        }
        const int clean_tick = end_tick + kTrailTicks;
        if (strip.x0 >= end_tick && strip.x1 - clean_tick >= kTrailTicks) {
            strip.x0 = std::max(strip.x0, clean_tick);
        }
        strips.push_back(strip);
    }
    return strips;
}

/// The finite strip pixels of one row.
void gather_row(const AmplifierFrame& frame, const std::vector<PixelBox>& strips, int row,
                std::vector<float>& out) {
    out.clear();
    for (const PixelBox& strip : strips) {
        if (row < strip.y0 || row >= strip.y1) {
            continue;
        }
        const int stride = 1 + (strip.width() - 1) / kMostColumns;
        const std::ptrdiff_t first = file_index(frame, {strip.x0, row});
        const std::ptrdiff_t step = file_index(frame, {strip.x0 + stride, row}) - first;
        for (int k = 0; strip.x0 + k * stride < strip.x1; ++k) {
            const float value = frame.pixels[static_cast<std::size_t>(first + k * step)];
            if (std::isfinite(value)) {
                out.push_back(value);
            }
        }
    }
}

/// Median over rows of the median absolute deviation within a row, as a standard deviation.
float column_scatter(const AmplifierFrame& frame, const AmplifierPlane& plane,
                     const std::vector<PixelBox>& strips) {
    constexpr int kRowsSampled = 64;
    std::vector<float> scatters;
    std::vector<float> values;
    const int step = std::max(1, plane.rows / kRowsSampled);
    for (int r = 0; r < plane.rows; r += step) {
        gather_row(frame, strips, plane.first_row + r, values);
        if (values.empty()) {
            continue;
        }
        const auto median = static_cast<float>(median_in_place(std::span<float>(values)));
        std::transform(values.begin(), values.end(), values.begin(),
                       [median](float v) { return std::abs(v - median); });
        scatters.push_back(static_cast<float>(median_in_place(std::span<float>(values))));
    }
    if (scatters.empty()) {
        return 0.0F;
    }
    return static_cast<float>(kMadToSigma * median_in_place(std::span<float>(scatters)));
}

/// Mean of the values within `reach` of their median: unlike the median itself it is not held to
/// the steps of the digitisation. NaN for none.
float clipped_mean(std::vector<float>& values, float reach) {
    if (values.empty()) {
        return kNaN;
    }
    const auto median = static_cast<float>(median_in_place(std::span<float>(values)));
    double sum = 0.0;
    int count = 0;
    for (const float v : values) {
        if (std::abs(v - median) <= reach) {
            sum += double(v) - double(median);
            ++count;
        }
    }
    return count > 0 ? static_cast<float>(median + sum / count) : median;
}

/// Running median of the finite levels; where a window has none, `fallback`.
std::vector<float> running_median(const std::vector<float>& levels, float fallback) {
    const int count = static_cast<int>(levels.size());
    std::vector<float> smooth(levels.size());
    std::vector<float> window;  // ordered
    int begin = 0;
    int end = 0;
    for (int r = 0; r < count; ++r) {
        const int half = std::max(kLeastHalfWindow, std::min({kHalfWindow, r, count - 1 - r}));
        for (; end <= std::min(count - 1, r + half); ++end) {
            if (std::isfinite(levels[end])) {
                window.insert(std::upper_bound(window.begin(), window.end(), levels[end]),
                              levels[end]);
            }
        }
        for (; begin < r - half; ++begin) {
            if (std::isfinite(levels[begin])) {
                window.erase(std::lower_bound(window.begin(), window.end(), levels[begin]));
            }
        }
        const std::size_t size = window.size();
        smooth[r] = size == 0 ? fallback : 0.5F * (window[(size - 1) / 2] + window[size / 2]);
    }
    return smooth;
}

/// Level of each row from its own strip pixels; empty: no strip has a value.
std::vector<float> levels_by_row(const AmplifierFrame& frame, const AmplifierPlane& plane,
                                 const std::vector<PixelBox>& strips) {
    // A digitised strip may have less scatter than one ADU: half a step either way is no outlier.
    const float reach =
        std::max(1.0F, static_cast<float>(kClipSigma) * column_scatter(frame, plane, strips));
    std::vector<float> levels(static_cast<std::size_t>(plane.rows));
    std::vector<float> values;
    for (int r = 0; r < plane.rows; ++r) {
        gather_row(frame, strips, plane.first_row + r, values);
        levels[r] = clipped_mean(values, reach);
    }
    std::vector<float> finite;
    std::copy_if(levels.begin(), levels.end(), std::back_inserter(finite),
                 [](float v) { return std::isfinite(v); });
    if (finite.empty()) {
        return {};
    }
    const auto fallback = static_cast<float>(median_in_place(std::span<float>(finite)));
    return running_median(levels, fallback);
}

/// One level from strips that share no row with the data.
float level_beyond_rows(const AmplifierFrame& frame, const std::vector<PixelBox>& boxes) {
    std::vector<float> values;
    for (const PixelBox& box : boxes) {
        for (int j = box.y0; j < box.y1; ++j) {
            const auto begin = frame.pixels.begin() + static_cast<std::ptrdiff_t>(j) * frame.width;
            std::copy_if(begin + box.x0, begin + box.x1, std::back_inserter(values),
                         [](float v) { return std::isfinite(v); });
        }
    }
    return values.empty() ? 0.0F : static_cast<float>(clipped_normal(values).location);
}

}  // namespace

BiasLevels measure_bias(const AmplifierFrame& frame, const AmplifierPlane& plane) {
    BiasLevels bias;
    for (const auto* boxes : {&frame.overscan, &frame.prescan}) {
        const std::vector<PixelBox> strips = serial_strips(frame, plane, *boxes);
        if (!strips.empty()) {
            bias.rows = levels_by_row(frame, plane, strips);
        }
        if (!bias.rows.empty()) {
            break;
        }
    }
    if (bias.rows.empty()) {
        bias.rows.assign(static_cast<std::size_t>(plane.rows),
                         level_beyond_rows(frame, frame.overscan));
    }
    bias.mean = std::accumulate(bias.rows.begin(), bias.rows.end(), 0.0) / plane.rows;
    return bias;
}

}  // namespace straymark
