#pragma once

#include <cstdint>
#include <span>
#include <vector>

#include "exposure/digest.h"

namespace straymark::crosstalk {

/// A stretch of source pixels in clock order that is clipped throughout, or nowhere.
struct SourceRun {
    std::int32_t row = 0;
    std::int32_t tick = 0;
    std::int32_t length = 0;
    std::uint32_t first_value = 0;
    std::int32_t blob = 0;  ///< index into SourceImage::blobs
    float peak_adu = 0.0F;
    bool clipped = false;
};

/// Connected bright pixels of one amplifier: a star, or several that touch.
struct SourceBlob {
    double total_adu = 0.0;
    double norm_adu = 0.0;  ///< square root of the sum of squares: bounds any filter's answer
    float peak_adu = 0.0F;
    ReadoutIndex peak;  ///< of a clipped core: the middle of its longest run
    int tick0 = 0, tick1 = 0, row0 = 0, row1 = 0;  ///< bounds, half-open
    int pixels = 0;
    std::uint32_t first_run = 0;  ///< into SourceImage::blob_runs
    std::uint32_t run_count = 0;
};

/// One amplifier as a source of echoes: its bright pixels cut at clipping borders and gathered into
/// blobs. Refers to the digest's values, which must outlive it.
struct SourceImage {
    std::span<const float> values;         ///< ADU above sky
    std::vector<SourceRun> runs;           ///< by row, then tick
    std::vector<std::uint32_t> row_start;  ///< runs of row r: row_start[r] .. row_start[r + 1]
    std::vector<SourceBlob> blobs;         ///< largest norm first
    std::vector<std::uint32_t> blob_runs;  ///< indices into runs, blob by blob
    std::vector<float> peak_from;          ///< largest peak of blobs i, i + 1, ...; one more, 0
    float largest_adu = 0.0F;

    [[nodiscard]] std::span<const std::uint32_t> runs_of(const SourceBlob& blob) const {
        return std::span(blob_runs).subspan(blob.first_run, blob.run_count);
    }
    /// Runs with row0 <= row < row1.
    [[nodiscard]] std::span<const SourceRun> runs_between(int row0, int row1) const;
};

SourceImage make_source_image(const AmplifierDigest& amplifier);

}  // namespace straymark::crosstalk
