#include "score/response.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <complex>
#include <cstddef>
#include <cstdlib>
#include <unsupported/Eigen/FFT>
#include <utility>

namespace straymark::score {
namespace {

using Complex = std::complex<double>;

/// Square two-dimensional transform. A spectrum stays transposed between forward and inverse.
class TileTransform {
public:
    explicit TileTransform(int side) : side_(side), scratch_(std::size_t(side) * side) {}

    void forward(std::vector<Complex>& tile) { both_axes(tile, true); }
    void inverse(std::vector<Complex>& tile) { both_axes(tile, false); }

private:
    void both_axes(std::vector<Complex>& tile, bool forwards) {
        rows(tile.data(), scratch_.data(), forwards);
        transpose(scratch_, tile);
        rows(tile.data(), scratch_.data(), forwards);
        tile.swap(scratch_);
    }
    void rows(const Complex* from, Complex* to, bool forwards) {
        for (int y = 0; y < side_; ++y) {
            const std::ptrdiff_t start = std::ptrdiff_t{y} * side_;
            if (forwards) {
                fft_.fwd(to + start, from + start, side_);
            } else {
                fft_.inv(to + start, from + start, side_);
            }
        }
    }
    void transpose(const std::vector<Complex>& from, std::vector<Complex>& to) const {
        constexpr int kBlock = 16;  // fits the first-level cache both ways
        for (int by = 0; by < side_; by += kBlock) {
            for (int bx = 0; bx < side_; bx += kBlock) {
                for (int y = by; y < by + kBlock; ++y) {
                    for (int x = bx; x < bx + kBlock; ++x) {
                        to[std::size_t(x) * side_ + y] = from[std::size_t(y) * side_ + x];
                    }
                }
            }
        }
    }

    int side_;
    Eigen::FFT<double> fft_;
    std::vector<Complex> scratch_;
};

/// Power of two that leaves most of a tile valid.
int tile_side(int radius) {
    int side = 256;
    while (side < 6 * radius) {
        side *= 2;
    }
    return side;
}

/// Conjugate spectrum of the point-spread function, its centre at index 0.
std::vector<Complex> correlation_kernel(const TruePsf& psf, int side, TileTransform& transform) {
    std::vector<Complex> kernel(std::size_t(side) * side);
    const int width = 2 * psf.radius + 1;
    for (int j = 0; j < width; ++j) {
        for (int i = 0; i < width; ++i) {
            const int x = (i - psf.radius + side) % side;
            const int y = (j - psf.radius + side) % side;
            kernel[std::size_t(y) * side + x] =
                static_cast<double>(psf.values[std::size_t(j) * width + i]);
        }
    }
    transform.forward(kernel);
    for (Complex& value : kernel) {
        value = std::conj(value);
    }
    return kernel;
}

float largest_magnitude(const TrueDetector& detector, const PixelBox& box) {
    float largest = 0.0F;
    for (int y = box.y0; y < box.y1; ++y) {
        for (int x = box.x0; x < box.x1; ++x) {
            largest =
                std::max(largest, std::abs(detector.signal_e[std::size_t(y) * detector.width + x]));
        }
    }
    return largest;
}

double quietest_noise(const TrueDetector& detector) {
    double noise = detector.amplifiers.front().noise_e;
    for (const TrueAmplifier& amplifier : detector.amplifiers) {
        noise = std::min(noise, amplifier.noise_e);
    }
    return noise;
}

/// Correlates the signal with P, adding to `sum`, tile by tile.
class TiledCorrelation {
public:
    TiledCorrelation(const TrueDetector& detector, std::vector<double>& sum)
        : detector_(detector),
          sum_(sum),
          radius_(detector.psf.radius),
          side_(tile_side(radius_)),
          step_(side_ - 2 * radius_),
          transform_(side_),
          kernel_(correlation_kernel(detector.psf, side_, transform_)),
          tile_(std::size_t(side_) * side_) {}

    void run() {
        const std::vector<PixelBox> parts = parts_with_signal();
        for (std::size_t i = 0; i < parts.size(); i += 2) {
            std::fill(tile_.begin(), tile_.end(), Complex{});
            const bool paired = i + 1 < parts.size();
            load(parts[i], Complex{1.0, 0.0});
            if (paired) {
                load(parts[i + 1], Complex{0.0, 1.0});
            }
            transform_.forward(tile_);
            for (std::size_t k = 0; k < tile_.size(); ++k) {
                tile_[k] *= kernel_[k];
            }
            transform_.inverse(tile_);
            store(parts[i], [](Complex value) { return value.real(); });
            if (paired) {
                store(parts[i + 1], [](Complex value) { return value.imag(); });
            }
        }
    }

private:
    [[nodiscard]] PixelBox whole() const { return {0, 0, detector_.width, detector_.height}; }

    /// Parts of the detector whose responses are computed; the others see too little signal.
    [[nodiscard]] std::vector<PixelBox> parts_with_signal() const {
        // sum |a P| <= max |a|, for P is not negative and sums to 1.
        const double negligible_e =
            kResponseLeftOut * quietest_noise(detector_) * std::sqrt(sum_of_squares(detector_.psf));
        std::vector<PixelBox> parts;
        for (int y = 0; y < detector_.height; y += step_) {
            for (int x = 0; x < detector_.width; x += step_) {
                const PixelBox part = PixelBox{x, y, x + step_, y + step_}.intersected(whole());
                if (static_cast<double>(largest_magnitude(
                        detector_, part.grown(radius_).intersected(whole()))) > negligible_e) {
                    parts.push_back(part);
                }
            }
        }
        return parts;
    }
    void load(const PixelBox& part, Complex unit) {
        const PixelBox from = part.grown(radius_).intersected(whole());
        for (int y = from.y0; y < from.y1; ++y) {
            for (int x = from.x0; x < from.x1; ++x) {
                tile_[place(part, x, y)] +=
                    unit *
                    static_cast<double>(detector_.signal_e[std::size_t(y) * detector_.width + x]);
            }
        }
    }
    template <typename Component>
    void store(const PixelBox& part, Component component) {
        for (int y = part.y0; y < part.y1; ++y) {
            for (int x = part.x0; x < part.x1; ++x) {
                sum_[std::size_t(y) * detector_.width + x] += component(tile_[place(part, x, y)]);
            }
        }
    }
    [[nodiscard]] std::size_t place(const PixelBox& part, int x, int y) const {
        return std::size_t(y - part.y0 + radius_) * side_ + (x - part.x0 + radius_);
    }

    const TrueDetector& detector_;
    std::vector<double>& sum_;
    int radius_, side_, step_;
    TileTransform transform_;
    std::vector<Complex> kernel_;
    std::vector<Complex> tile_;
};

/// Subtracts the mean signal of the box about every pixel, by a table of sums.
void subtract_box_mean(const TrueDetector& detector, int side, std::vector<double>& sum) {
    const int width = detector.width;
    const int height = detector.height;
    std::vector<double> table(std::size_t(width + 1) * (height + 1));
    const auto at = [&table, width](int x, int y) -> double& {
        return table[std::size_t(y) * (width + 1) + x];
    };
    for (int y = 0; y < height; ++y) {
        double row = 0.0;
        for (int x = 0; x < width; ++x) {
            row += static_cast<double>(detector.signal_e[std::size_t(y) * width + x]);
            at(x + 1, y + 1) = at(x + 1, y) + row;
        }
    }
    const double area = static_cast<double>(side) * side;
    for (int y = 0; y < height; ++y) {
        const int y0 = std::max(0, y - side / 2);
        const int y1 = std::min(height, y - side / 2 + side);
        for (int x = 0; x < width; ++x) {
            const int x0 = std::max(0, x - side / 2);
            const int x1 = std::min(width, x - side / 2 + side);
            sum[std::size_t(y) * width + x] -=
                (at(x1, y1) - at(x0, y1) - at(x1, y0) + at(x0, y0)) / area;
        }
    }
}

}  // namespace

std::vector<float> true_response(const TrueDetector& detector, int background_px) {
    assert(background_px >= 0 && !detector.amplifiers.empty());
    std::vector<double> sum(detector.signal_e.size());
    TiledCorrelation(detector, sum).run();
    if (background_px > 0) {
        subtract_box_mean(detector, background_px, sum);
    }
    std::vector<float> response(sum.size());
    const double filter_noise = std::sqrt(sum_of_squares(detector.psf));
    for (const TrueAmplifier& amplifier : detector.amplifiers) {
        const double scale = 1.0 / (amplifier.noise_e * filter_noise);
        for (int y = amplifier.section.y0; y < amplifier.section.y1; ++y) {
            for (int x = amplifier.section.x0; x < amplifier.section.x1; ++x) {
                const std::size_t i = std::size_t(y) * detector.width + x;
                response[i] = static_cast<float>(sum[i] * scale);
            }
        }
    }
    return response;
}

}  // namespace straymark::score
