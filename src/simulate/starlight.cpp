#include "simulate/starlight.h"

#include <algorithm>
#include <array>
#include <cmath>

namespace straymark::simulate {
namespace {

// Gauss-Legendre places and weights over a pixel, from -1/2 to 1/2.
constexpr std::array<double, 2> kPlaces2{-0.28867513459481287, 0.28867513459481287};
constexpr std::array<double, 2> kWeights2{0.5, 0.5};
constexpr std::array<double, 3> kPlaces3{-0.3872983346207417, 0.0, 0.3872983346207417};
constexpr std::array<double, 3> kWeights3{5.0 / 18.0, 8.0 / 18.0, 5.0 / 18.0};

// Where the profile has become straight enough for fewer points (pixels from the centre).
constexpr double kCore_px = 6.0;
constexpr double kWing_px = 25.0;

}  // namespace

PointSpread::PointSpread(double fwhm_px, double beta, double ellipticity, Vec2 major_axis)
    : beta_(beta) {
    const double scale = 0.5 * fwhm_px / std::sqrt(std::exp2(1.0 / beta) - 1.0);
    const double major = scale / std::sqrt(1.0 - ellipticity);
    const double minor = scale * std::sqrt(1.0 - ellipticity);
    const double a = 1.0 / (major * major);
    const double b = 1.0 / (minor * minor);
    xx_ = a * major_axis.x * major_axis.x + b * major_axis.y * major_axis.y;
    yy_ = a * major_axis.y * major_axis.y + b * major_axis.x * major_axis.x;
    xy_ = (a - b) * major_axis.x * major_axis.y;
    peak_ = (beta - 1.0) / (std::numbers::pi * major * minor);
    longest_px_ = major;
}

double PointSpread::density(Vec2 offset) const {
    const double q =
        xx_ * offset.x * offset.x + 2.0 * xy_ * offset.x * offset.y + yy_ * offset.y * offset.y;
    return peak_ * std::pow(1.0 + q, -beta_);
}

double PointSpread::in_pixel(Vec2 offset) const {
    const double square = dot(offset, offset);
    const auto over = [&](const auto& places, const auto& weights) {
        double sum = 0.0;
        for (std::size_t j = 0; j < places.size(); ++j) {
            for (std::size_t i = 0; i < places.size(); ++i) {
                sum +=
                    weights[i] * weights[j] * density({offset.x + places[i], offset.y + places[j]});
            }
        }
        return sum;
    };
    if (square < kCore_px * kCore_px) {
        return over(kPlaces3, kWeights3);
    }
    if (square < kWing_px * kWing_px) {
        return over(kPlaces2, kWeights2);
    }
    return density(offset);
}

double PointSpread::reach_px(double light_e, double least_e) const {
    const double ratio = light_e * peak_ / least_e;
    return ratio <= 1.0 ? 0.0 : longest_px_ * std::sqrt(std::pow(ratio, 1.0 / beta_) - 1.0);
}

void paint_stars(std::span<const StarImage> stars, const PointSpread& spread, int width,
                 int first_row, int end_row, std::vector<float>& light) {
    for (const StarImage& star : stars) {
        const int x0 = std::max(0, static_cast<int>(std::ceil(star.pixel.x - star.reach_px)));
        const int x1 =
            std::min(width - 1, static_cast<int>(std::floor(star.pixel.x + star.reach_px)));
        const int y0 =
            std::max(first_row, static_cast<int>(std::ceil(star.pixel.y - star.reach_px)));
        const int y1 =
            std::min(end_row - 1, static_cast<int>(std::floor(star.pixel.y + star.reach_px)));
        const double square = star.reach_px * star.reach_px;
        for (int y = y0; y <= y1; ++y) {
            float* row = light.data() + static_cast<std::ptrdiff_t>(y) * width;
            for (int x = x0; x <= x1; ++x) {
                const Vec2 offset{x - star.pixel.x, y - star.pixel.y};
                if (dot(offset, offset) <= square) {
                    row[x] += static_cast<float>(star.light_e * spread.in_pixel(offset));
                }
            }
        }
    }
}

}  // namespace straymark::simulate
