#pragma once

#include <span>
#include <string>
#include <vector>

#include "core/frames.h"
#include "core/pixel_box.h"

namespace straymark {

/// The raw pixels of one amplifier as stored in its file, with what says where they belong.
/// Index of file pixel (i, j), 0-based: j * width + i. Units: raw ADU. NaN: no value.
struct AmplifierFrame {
    int width = 0;
    int height = 0;
    std::vector<float> pixels;       ///< width * height; a buffer that is reused
    PixelBox data;                   ///< the data pixels, in file pixels
    std::vector<PixelBox> overscan;  ///< bias strips beside the data (not prescan), file pixels
    std::vector<PixelBox> prescan;
    /// Read-out index of the data pixel at (data.x0, data.y0), and the steps per file column/row.
    ReadoutIndex origin;
    int tick_per_column = 1, row_per_column = 0, tick_per_row = 0, row_per_row = 1;

    [[nodiscard]] ReadoutIndex readout_from_file(int i, int j) const {
        const int di = i - data.x0;
        const int dj = j - data.y0;
        return {origin.tick + di * tick_per_column + dj * tick_per_row,
                origin.row + di * row_per_column + dj * row_per_row};
    }
};

/// The pixels of one detector of one exposure: transient, handed out amplifier by amplifier so that
/// no more than one amplifier for each thread is in memory. Implemented in io/.
class DetectorFrame {
public:
    virtual ~DetectorFrame() = default;
    DetectorFrame() = default;
    DetectorFrame(const DetectorFrame&) = delete;
    DetectorFrame& operator=(const DetectorFrame&) = delete;

    /// Fills `frame` (its buffer is reused) with amplifier `amplifier` of the camera's detector.
    /// Calls for different amplifiers may come from several threads at once, each with its own
    /// frame. Throws InputError where that amplifier's HDU is missing or damaged.
    virtual void read(int amplifier, AmplifierFrame& frame) = 0;
    /// Header cards (80 characters) that may carry this detector's WCS; empty: none.
    [[nodiscard]] virtual std::vector<std::string> wcs_cards() const = 0;
    [[nodiscard]] virtual const std::string& path() const = 0;
};

}  // namespace straymark
