#include "artifacts/crosstalk/sources.h"

#include <algorithm>
#include <cmath>
#include <numeric>

#include "raster/components.h"

namespace straymark::crosstalk {
namespace {

/// Cuts one digest run at the borders of its clipped spans and appends the pieces.
void append_pieces(const AmplifierDigest& amplifier, const ReadoutRun& run,
                   std::size_t& next_saturated, SourceImage& image) {
    const auto append = [&](int tick, int end, bool clipped) {
        if (end <= tick) {
            return;
        }
        const std::uint32_t first = run.first_value + static_cast<std::uint32_t>(tick - run.tick);
        const auto begin = amplifier.values.begin() + static_cast<std::ptrdiff_t>(first);
        image.runs.push_back({run.row, tick, end - tick, first, 0,
                              *std::max_element(begin, begin + (end - tick)), clipped});
    };
    int tick = run.tick;
    const int end = run.tick + run.length;
    while (next_saturated < amplifier.saturated.size()) {
        const ReadoutSpan& span = amplifier.saturated[next_saturated];
        if (span.row != run.row || span.tick >= end) {
            break;
        }
        append(tick, span.tick, false);
        append(span.tick, span.tick + span.length, true);
        tick = span.tick + span.length;
        ++next_saturated;
    }
    append(tick, end, false);
}

void index_rows(SourceImage& image) {
    const int rows = image.runs.empty() ? 0 : image.runs.back().row + 1;
    image.row_start.assign(static_cast<std::size_t>(rows) + 1, 0);
    for (const SourceRun& run : image.runs) {
        ++image.row_start[static_cast<std::size_t>(run.row) + 1];
    }
    std::partial_sum(image.row_start.begin(), image.row_start.end(), image.row_start.begin());
}

void grow_blob(SourceBlob& blob, const SourceRun& run, std::span<const float> values,
               int& longest_peak_run) {
    const bool first = blob.pixels == 0;
    blob.tick0 = first ? run.tick : std::min(blob.tick0, run.tick);
    blob.tick1 = std::max(blob.tick1, run.tick + run.length);
    blob.row0 = first ? run.row : blob.row0;
    blob.row1 = run.row + 1;
    blob.pixels += run.length;
    const auto of_run = values.subspan(run.first_value, static_cast<std::size_t>(run.length));
    for (const float value : of_run) {
        blob.total_adu += static_cast<double>(value);
        blob.norm_adu += static_cast<double>(value) * static_cast<double>(value);
    }
    // Clipped values are all alike: the place is then the middle of the longest clipped run.
    const bool better = run.clipped ? run.length > longest_peak_run
                                    : longest_peak_run == 0 && run.peak_adu > blob.peak_adu;
    if (better) {
        const auto peak = std::max_element(of_run.begin(), of_run.end()) - of_run.begin();
        blob.peak = {run.clipped ? run.tick + run.length / 2 : run.tick + static_cast<int>(peak),
                     run.row};
        longest_peak_run = run.clipped ? run.length : 0;
    }
    blob.peak_adu = std::max(blob.peak_adu, run.peak_adu);
}

}  // namespace

std::span<const SourceRun> SourceImage::runs_between(int row0, int row1) const {
    const int rows = static_cast<int>(row_start.size()) - 1;
    const int from = std::clamp(row0, 0, rows);
    const int to = std::clamp(row1, from, rows);
    const std::uint32_t first = row_start[static_cast<std::size_t>(from)];
    return std::span(runs).subspan(first, row_start[static_cast<std::size_t>(to)] - first);
}

SourceImage make_source_image(const AmplifierDigest& amplifier) {
    SourceImage image;
    image.values = amplifier.values;
    image.runs.reserve(amplifier.runs.size() + 2 * amplifier.saturated.size());
    std::size_t next_saturated = 0;
    for (const ReadoutRun& run : amplifier.runs) {
        append_pieces(amplifier, run, next_saturated, image);
    }
    index_rows(image);

    std::vector<PixelRun> runs;
    runs.reserve(image.runs.size());
    for (const SourceRun& run : image.runs) {
        runs.push_back({run.row, run.tick, run.length});
    }
    const RunComponents components = connected_components(runs);

    const auto count = static_cast<std::size_t>(components.count);
    std::vector<SourceBlob> found(count);
    std::vector<int> longest(count, 0);
    for (std::size_t i = 0; i < image.runs.size(); ++i) {
        const auto label = static_cast<std::size_t>(components.label[i]);
        grow_blob(found[label], image.runs[i], image.values, longest[label]);
        ++found[label].run_count;
    }
    for (SourceBlob& blob : found) {
        blob.norm_adu = std::sqrt(blob.norm_adu);
    }
    std::vector<std::uint32_t> order(count);
    std::iota(order.begin(), order.end(), 0U);
    std::stable_sort(order.begin(), order.end(), [&](std::uint32_t a, std::uint32_t b) {
        return found[a].norm_adu > found[b].norm_adu;
    });
    std::vector<std::uint32_t> rank(count);
    std::uint32_t first_run = 0;
    for (std::uint32_t i = 0; i < count; ++i) {
        rank[order[i]] = i;
        SourceBlob& blob = image.blobs.emplace_back(found[order[i]]);
        blob.first_run = first_run;
        first_run += blob.run_count;
        image.largest_adu = std::max(image.largest_adu, blob.peak_adu);
    }
    image.blob_runs.resize(image.runs.size());
    std::vector<std::uint32_t> filled(count, 0);
    for (std::uint32_t i = 0; i < image.runs.size(); ++i) {
        const std::uint32_t blob = rank[static_cast<std::size_t>(components.label[i])];
        image.runs[i].blob = static_cast<std::int32_t>(blob);
        image.blob_runs[image.blobs[blob].first_run + filled[blob]++] = i;
    }
    image.peak_from.assign(count + 1, 0.0F);
    for (std::size_t i = count; i > 0; --i) {
        image.peak_from[i - 1] = std::max(image.peak_from[i], image.blobs[i - 1].peak_adu);
    }
    return image;
}

}  // namespace straymark::crosstalk
