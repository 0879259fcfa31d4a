#include "exposure/moffat.h"

#include <cassert>
#include <cmath>

namespace straymark {

MoffatShape MoffatShape::circular(double fwhm_px, double beta) {
    const double inverse_alpha_squared =
        4.0 * std::expm1(std::log(2.0) / beta) / (fwhm_px * fwhm_px);
    return {inverse_alpha_squared, 0.0, inverse_alpha_squared, beta};
}

double MoffatShape::fwhm() const {
    return 2.0 * std::sqrt(std::expm1(std::log(2.0) / beta) / std::sqrt(a * c - b * b));
}

double MoffatShape::volume() const {
    return M_PI / ((beta - 1.0) * std::sqrt(a * c - b * b));
}

bool MoffatShape::valid() const {
    return a > 0.0 && c > 0.0 && a * c > b * b && beta > 1.0 && std::isfinite(a + b + c + beta);
}

PixelQuadrature::PixelQuadrature(int points) : points_(points) {
    assert(points >= 1 && points <= 3);
    if (points == 1) {
        node_ = {0.0};
        weight_ = {1.0};
    } else if (points == 2) {
        node_ = {-0.5 / std::sqrt(3.0), 0.5 / std::sqrt(3.0)};
        weight_ = {0.5, 0.5};
    } else {
        node_ = {-0.5 * std::sqrt(0.6), 0.0, 0.5 * std::sqrt(0.6)};
        weight_ = {5.0 / 18.0, 8.0 / 18.0, 5.0 / 18.0};
    }
}

PixelQuadrature PixelQuadrature::for_fwhm(double fwhm_px) {
    return PixelQuadrature(fwhm_px > 5.0 ? 1 : fwhm_px > 2.2 ? 2 : 3);
}

double PixelQuadrature::value(const MoffatShape& shape, double dx, double dy) const {
    double sum = 0.0;
    for (int j = 0; j < points_; ++j) {
        for (int i = 0; i < points_; ++i) {
            const double x = dx + node_[i];
            const double y = dy + node_[j];
            const double q = shape.a * x * x + 2.0 * shape.b * x * y + shape.c * y * y;
            sum += weight_[i] * weight_[j] * std::exp(-shape.beta * std::log(1.0 + q));
        }
    }
    return sum;
}

MoffatPixel PixelQuadrature::derivatives(const MoffatShape& shape, double dx, double dy) const {
    MoffatPixel pixel;
    for (int j = 0; j < points_; ++j) {
        for (int i = 0; i < points_; ++i) {
            const double x = dx + node_[i];
            const double y = dy + node_[j];
            const double q = shape.a * x * x + 2.0 * shape.b * x * y + shape.c * y * y;
            const double log_term = std::log(1.0 + q);
            const double value = weight_[i] * weight_[j] * std::exp(-shape.beta * log_term);
            const double d_q = -shape.beta * value / (1.0 + q);
            pixel.value += value;
            pixel.d_dx += d_q * 2.0 * (shape.a * x + shape.b * y);
            pixel.d_dy += d_q * 2.0 * (shape.b * x + shape.c * y);
            pixel.d_shape[0] += d_q * x * x;
            pixel.d_shape[1] += d_q * 2.0 * x * y;
            pixel.d_shape[2] += d_q * y * y;
            pixel.d_shape[3] -= value * log_term;
        }
    }
    return pixel;
}

}  // namespace straymark
