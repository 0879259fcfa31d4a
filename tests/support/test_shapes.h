#pragma once

#include <cmath>
#include <functional>
#include <memory>
#include <utility>

#include "artifacts/mark.h"
#include "exposure/digest.h"

/// Signals and point-spread functions made for tests.

namespace straymark::test {

/// A signal given by a function of the pixel, within a box.
class FunctionShape : public SignalShape {
public:
    FunctionShape(PixelBox box, std::function<double(int, int)> signal)
        : box_(box), signal_(std::move(signal)) {}
    [[nodiscard]] PixelBox bounds() const override { return box_; }
    void add_to(const SignalWindow& window, float scale) const override {
        const PixelBox part = box_.intersected(window.box);
        for (int y = part.y0; y < part.y1; ++y) {
            for (int x = part.x0; x < part.x1; ++x) {
                window.values[static_cast<std::size_t>(y - window.box.y0) *
                                  static_cast<std::size_t>(window.box.width()) +
                              static_cast<std::size_t>(x - window.box.x0)] +=
                    scale * static_cast<float>(signal_(x, y));
            }
        }
    }

private:
    PixelBox box_;
    std::function<double(int, int)> signal_;
};

inline std::shared_ptr<const SignalShape> constant_shape(PixelBox box, double value) {
    return std::make_shared<const FunctionShape>(box, [value](int, int) { return value; });
}

/// A radially symmetric profile sampled at pixel centres, sum 1 on its grid.
inline Psf sampled_psf(int radius, double fwhm_px, const std::function<double(double)>& profile) {
    Psf psf;
    psf.source = PsfSource::measured;
    psf.radius = radius;
    psf.fwhm_px = fwhm_px;
    double sum = 0.0;
    for (int y = -radius; y <= radius; ++y) {
        for (int x = -radius; x <= radius; ++x) {
            psf.values.push_back(static_cast<float>(profile(std::hypot(x, y))));
            sum += static_cast<double>(psf.values.back());
        }
    }
    double square = 0.0;
    for (float& value : psf.values) {
        value = static_cast<float>(static_cast<double>(value) / sum);
        square += static_cast<double>(value) * static_cast<double>(value);
    }
    psf.noise_equivalent_area_px = 1.0 / square;
    return psf;
}

inline Psf gaussian_psf(int radius, double sigma_px) {
    return sampled_psf(radius, 2.3548 * sigma_px, [sigma_px](double r) {
        return std::exp(-r * r / (2.0 * sigma_px * sigma_px));
    });
}

inline Psf moffat_psf(int radius, double fwhm_px, double beta) {
    const double alpha = 0.5 * fwhm_px / std::sqrt(std::pow(2.0, 1.0 / beta) - 1.0);
    return sampled_psf(radius, fwhm_px, [alpha, beta](double r) {
        return std::pow(1.0 + r * r / (alpha * alpha), -beta);
    });
}

/// A detector of one amplifier, gain 1, with a measured digest of this noise.
struct PlainDetector {
    Detector detector;
    DetectorDigest digest;

    PlainDetector(int width, int height, double noise_e, Psf psf) {
        detector.id = "d1";
        detector.width = width;
        detector.height = height;
        Amplifier amplifier;
        amplifier.id = "a1";
        amplifier.readout =
            ReadoutGeometry({0, 0, width, height}, Corner::lower_left, SerialAxis::x, 0);
        amplifier.gain_e_per_adu = 1.0;
        amplifier.saturation_adu = 60000.0;
        detector.amplifiers.push_back(amplifier);
        digest.present = true;
        digest.psf = std::move(psf);
        AmplifierDigest measured;
        measured.state = AmplifierState::ok;
        measured.noise_adu = noise_e;
        digest.amplifiers.push_back(measured);
    }
};

}  // namespace straymark::test
