#pragma once

#include <cmath>
#include <cstdint>
#include <functional>
#include <random>
#include <string>
#include <vector>

#include "camera/camera.h"
#include "core/error.h"
#include "exposure/frame.h"

/// Star fields and frames for the tests of exposure/, made without any of its code: pixels are
/// means of 11 x 11 points (5 x 5 far out) of the profile, noise is the standard library's.

namespace straymark::test {

/// A detector image in electrons above the bias, 0-based.
struct Field {
    int width = 0;
    int height = 0;
    std::vector<double> electrons;

    Field(int w, int h, double sky = 0.0)
        : width(w), height(h), electrons(static_cast<std::size_t>(w) * h, sky) {}
    double& at(int x, int y) { return electrons[static_cast<std::size_t>(y) * width + x]; }
    [[nodiscard]] double at(int x, int y) const {
        return electrons[static_cast<std::size_t>(y) * width + x];
    }
};

/// Moffat profile of unit volume, averaged over the pixel at offset (dx, dy) by brute force.
inline double moffat_pixel(double dx, double dy, double fwhm, double beta) {
    const int points = dx * dx + dy * dy < 36.0 ? 11 : 5;
    const double alpha = 0.5 * fwhm / std::sqrt(std::pow(2.0, 1.0 / beta) - 1.0);
    double sum = 0.0;
    for (int j = 0; j < points; ++j) {
        for (int i = 0; i < points; ++i) {
            const double x = dx + (i + 0.5) / points - 0.5;
            const double y = dy + (j + 0.5) / points - 0.5;
            sum += std::pow(1.0 + (x * x + y * y) / (alpha * alpha), -beta);
        }
    }
    return sum / (points * points) * (beta - 1.0) / (M_PI * alpha * alpha);
}

inline void add_star(Field& field, double x, double y, double flux_e, double fwhm, double beta,
                     int radius = 40) {
    for (int j = static_cast<int>(y) - radius; j <= static_cast<int>(y) + radius; ++j) {
        for (int i = static_cast<int>(x) - radius; i <= static_cast<int>(x) + radius; ++i) {
            if (i >= 0 && j >= 0 && i < field.width && j < field.height) {
                field.at(i, j) += flux_e * moffat_pixel(i - x, j - y, fwhm, beta);
            }
        }
    }
}

/// Noise-equivalent area of a Moffat image centred on a pixel, from its brute-force pixels.
inline double moffat_noise_equivalent_area(double fwhm, double beta, int radius) {
    double sum = 0.0;
    double squares = 0.0;
    for (int j = -radius; j <= radius; ++j) {
        for (int i = -radius; i <= radius; ++i) {
            const double value = moffat_pixel(i, j, fwhm, beta);
            sum += value;
            squares += value * value;
        }
    }
    return sum * sum / squares;
}

/// How an amplifier's file stores its pixels.
struct Storage {
    bool flip_columns = false;
    bool flip_rows = false;
    bool transposed = false;
};

/// A camera of one detector: `columns` by `rows` equal amplifiers, corners as given (cycled).
inline Camera make_camera(int width, int height, int columns, int rows,
                          std::vector<Corner> corners = {Corner::lower_left},
                          SerialAxis serial = SerialAxis::x, int prescan = 0) {
    Camera camera;
    camera.name = "petrel";
    Detector detector;
    detector.id = "d1";
    detector.width = width;
    detector.height = height;
    detector.serial = serial;
    for (int j = 0; j < rows; ++j) {
        for (int i = 0; i < columns; ++i) {
            Amplifier amplifier;
            const int k = j * columns + i;
            amplifier.id = std::to_string(k + 1);
            amplifier.readout = ReadoutGeometry(
                {width * i / columns, height * j / rows, width * (i + 1) / columns,
                 height * (j + 1) / rows},
                corners[static_cast<std::size_t>(k) % corners.size()], serial, prescan);
            amplifier.gain_e_per_adu = 2.0;
            amplifier.read_noise_e = 6.0;
            amplifier.saturation_adu = 60000.0;
            detector.amplifiers.push_back(amplifier);
        }
    }
    camera.detectors.push_back(detector);
    return camera;
}

/// A detector frame in memory. Raw ADU = bias + clipped electrons / gain + noise, rounded.
class MemoryFrame : public DetectorFrame {
public:
    static constexpr double kBias = 1000.0;
    static constexpr double kFullAdu = 65535.0;

    MemoryFrame(const Camera& camera, const Field& field, std::uint64_t seed, int overscan = 32)
        : camera_(camera), overscan_(overscan) {
        const Detector& detector = camera.detectors.front();
        for (const Amplifier& amplifier : detector.amplifiers) {
            clocked_.push_back(digitise(amplifier, field, seed++));
        }
        storage_.resize(clocked_.size());
    }

    /// Raw values in clock order, row by row, overscan included: tests may change them.
    [[nodiscard]] float& raw(int amplifier, int tick, int row) {
        return clocked_[amplifier][static_cast<std::size_t>(row) * ticks(amplifier) + tick];
    }
    void store(int amplifier, Storage storage) { storage_[amplifier] = storage; }
    void lose(int amplifier) { lost_ = amplifier; }

    /// Ticks of a row, overscan included; the first data tick has index zero here.
    [[nodiscard]] int ticks(int amplifier) const {
        const ReadoutGeometry& readout = camera_.detectors.front().amplifiers[amplifier].readout;
        return readout.end_tick() - readout.first_tick() + overscan_;
    }
    [[nodiscard]] int rows(int amplifier) const {
        const ReadoutGeometry& readout = camera_.detectors.front().amplifiers[amplifier].readout;
        return readout.end_row() - readout.first_row();
    }

    void read(int amplifier, AmplifierFrame& frame) override {
        if (amplifier == lost_) {
            throw InputError({"petrel.fits", "HDU 3", "nothing", "the pixels of d1/a2", ""});
        }
        const int all_ticks = ticks(amplifier);
        const int all_rows = rows(amplifier);
        const int data_ticks = all_ticks - overscan_;
        const Storage& storage = storage_[amplifier];
        const ReadoutGeometry& readout = camera_.detectors.front().amplifiers[amplifier].readout;
        frame.width = storage.transposed ? all_rows : all_ticks;
        frame.height = storage.transposed ? all_ticks : all_rows;
        frame.pixels.assign(static_cast<std::size_t>(all_ticks) * all_rows, -1.0F);
        // Where a clocked pixel lies in the file: flipped along the file's own axes, or turned.
        const auto file_x = [&](int t, int r) {
            const int k = storage.transposed ? r : t;
            return storage.flip_columns ? frame.width - 1 - k : k;
        };
        const auto file_y = [&](int t, int r) {
            const int k = storage.transposed ? t : r;
            return storage.flip_rows ? frame.height - 1 - k : k;
        };
        for (int r = 0; r < all_rows; ++r) {
            for (int t = 0; t < all_ticks; ++t) {
                frame.pixels[static_cast<std::size_t>(file_y(t, r)) * frame.width + file_x(t, r)] =
                    raw(amplifier, t, r);
            }
        }
        const auto box = [&](int t0, int t1) {
            const int xa = file_x(t0, 0), xb = file_x(t1 - 1, all_rows - 1);
            const int ya = file_y(t0, 0), yb = file_y(t1 - 1, all_rows - 1);
            return PixelBox{std::min(xa, xb), std::min(ya, yb), std::max(xa, xb) + 1,
                            std::max(ya, yb) + 1};
        };
        frame.data = box(0, data_ticks);
        frame.overscan.clear();
        frame.prescan.clear();
        if (overscan_ > 0) {
            frame.overscan.push_back(box(data_ticks, all_ticks));
        }
        frame.tick_per_column = storage.transposed ? 0 : (storage.flip_columns ? -1 : 1);
        frame.row_per_column = storage.transposed ? (storage.flip_columns ? -1 : 1) : 0;
        frame.tick_per_row = storage.transposed ? (storage.flip_rows ? -1 : 1) : 0;
        frame.row_per_row = storage.transposed ? 0 : (storage.flip_rows ? -1 : 1);
        // The file pixel (data.x0, data.y0) is the clocked pixel at the matching end of each axis.
        const bool late_ticks = storage.transposed ? storage.flip_rows : storage.flip_columns;
        const bool late_rows = storage.transposed ? storage.flip_columns : storage.flip_rows;
        frame.origin = {readout.first_tick() + (late_ticks ? data_ticks - 1 : 0),
                        readout.first_row() + (late_rows ? all_rows - 1 : 0)};
    }
    [[nodiscard]] std::vector<std::string> wcs_cards() const override { return {}; }
    [[nodiscard]] const std::string& path() const override { return path_; }

private:
    [[nodiscard]] std::vector<float> digitise(const Amplifier& amplifier, const Field& field,
                                              std::uint64_t seed) const {
        std::mt19937_64 engine(seed);
        std::normal_distribution<double> normal;
        const ReadoutGeometry& readout = amplifier.readout;
        std::vector<float> values;
        for (int r = readout.first_row(); r < readout.end_row(); ++r) {
            for (int t = readout.first_tick(); t < readout.end_tick() + overscan_; ++t) {
                const DetectorPixel pixel = readout.detector_from_readout({t, r});
                const double electrons = t < readout.end_tick() ? field.at(pixel.x, pixel.y) : 0.0;
                const double noise_e =
                    std::sqrt(amplifier.read_noise_e * amplifier.read_noise_e + electrons);
                const double adu =
                    kBias + (electrons + noise_e * normal(engine)) / amplifier.gain_e_per_adu;
                values.push_back(static_cast<float>(std::min(std::round(adu), kFullAdu)));
            }
        }
        return values;
    }

    const Camera& camera_;
    int overscan_;
    std::vector<std::vector<float>> clocked_;
    std::vector<Storage> storage_;
    int lost_ = -1;
    std::string path_ = "/nights/petrel 1.fits";
};

}  // namespace straymark::test
