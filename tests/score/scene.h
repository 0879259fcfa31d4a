#pragma once

#include <array>
#include <cmath>
#include <cstddef>
#include <fmt/format.h>
#include <numbers>
#include <string>
#include <vector>

#include "score/found.h"
#include "score/truth.h"

/// Hand-made truths whose responses are known in closed form (docs/methods/decision.md gives them;
/// Np = 4 pi s^2 for a Gaussian of s pixels: King 1983, PASP 95, 163), and masks drawn from these
/// closed forms, not by the code under test.

namespace straymark::score::test {

/// A Gaussian sampled at the pixels' centres. With s = 1.5 px or more its sums equal the
/// integrals to 1e-9 (Poisson summation: 2 exp(-2 pi^2 s^2)).
inline TruePsf gaussian_psf(double s, int radius) {
    TruePsf psf{radius, {}};
    for (int y = -radius; y <= radius; ++y) {
        for (int x = -radius; x <= radius; ++x) {
            psf.values.push_back(static_cast<float>(std::exp(-(x * x + y * y) / (2.0 * s * s)) /
                                                    (2.0 * std::numbers::pi * s * s)));
        }
    }
    return psf;
}

/// A detector of one amplifier without signal.
inline TrueDetector empty_detector(int width, int height, double noise_e, TruePsf psf) {
    TrueDetector detector;
    detector.id = "d1";
    detector.width = width;
    detector.height = height;
    detector.psf = std::move(psf);
    detector.amplifiers = {{"d1/a01", {0, 0, width, height}, 2.0, noise_e}};
    detector.signal_e.assign(static_cast<std::size_t>(width) * static_cast<std::size_t>(height),
                             0.0F);
    return detector;
}

inline constexpr std::int32_t kPositive = 4;
inline constexpr std::int32_t kNegative = 8;
inline constexpr std::int32_t kMarginal = 256;
inline constexpr std::int32_t kUnassessed = 512;
inline constexpr BitValues kValues{kPositive, kNegative, kUnassessed, kMarginal, 1, 2, 128};

inline FoundDetector empty_mask(const TrueDetector& truth) {
    FoundDetector found;
    found.present = true;
    found.values = kValues;
    found.bits.assign(truth.signal_e.size(), 0);
    for (const TrueAmplifier& amplifier : truth.amplifiers) {
        found.amplifiers.push_back(
            {amplifier.name, true, amplifier.gain_e_per_adu, amplifier.noise_e});
    }
    return found;
}

/// One exposure of a detector of four amplifiers, two by two, 128 pixels each. Every amplifier
/// receives three echoes of each of the other three: Gaussians of the point-spread function's own
/// width, whose response at distance r is (F / 2 s sqrt(pi) noise) exp(-r^2 / 4 s^2).
class EchoScene {
public:
    static constexpr int kSide = 128;
    static constexpr double kS = 1.6;
    static constexpr double kNoise = 10.0;
    static constexpr int kAmplifiers = 4;

    /// What a total charge leaves in the central pixel.
    static constexpr double kPeakShare = 1.0 / (2.0 * std::numbers::pi * kS * kS);

    struct Blob {
        int victim = 0, source = 0;
        int x = 0, y = 0;
        double response = 0.0;  ///< at its peak, signed
        [[nodiscard]] double total_e() const {
            return response * 2.0 * kS * std::sqrt(std::numbers::pi) * kNoise;
        }
        [[nodiscard]] double peak_e() const { return total_e() * kPeakShare; }
    };

    EchoScene() {
        truth = empty_detector(2 * kSide, 2 * kSide, kNoise, gaussian_psf(kS, 12));
        truth.amplifiers.clear();
        for (int a = 0; a < kAmplifiers; ++a) {
            const int x = a % 2 * kSide;
            const int y = a / 2 * kSide;
            truth.amplifiers.push_back({name(a), {x, y, x + kSide, y + kSide}, 2.0, kNoise});
        }
        for (int victim = 0; victim < kAmplifiers; ++victim) {
            int slot = 0;
            for (int source = 0; source < kAmplifiers; ++source) {
                if (source == victim) {
                    continue;
                }
                for (const double response : {3.0, 6.0, 12.0}) {
                    const double sign = (victim + source) % 2 == 0 ? 1.0 : -1.0;
                    blobs.push_back({victim, source, victim % 2 * kSide + 24 + slot % 3 * 40,
                                     victim / 2 * kSide + 24 + slot / 3 * 40, sign * response});
                    ++slot;
                }
            }
        }
        for (const Blob& blob : blobs) {
            add_signal(blob);
        }
    }

    void add(const Blob& blob) {
        blobs.push_back(blob);
        add_signal(blob);
    }

    static std::string name(int amplifier) { return fmt::format("d1/a{:02}", amplifier + 1); }

    /// A mask by the closed form. `blob`s as the mask's maker believes them to be.
    [[nodiscard]] FoundDetector mask_of(const std::vector<Blob>& believed) const {
        FoundDetector found = empty_mask(truth);
        for (const Blob& blob : believed) {
            const int reach = flag(blob, found);
            // 2 % errors, for the pair as a whole.
            found.marks.push_back({name(blob.source), true, static_cast<double>(blob.x),
                                   static_cast<double>(blob.y),
                                   PixelBox{blob.x, blob.y, blob.x + 1, blob.y + 1}.grown(reach),
                                   blob.peak_e(), 0.02 * std::abs(blob.peak_e())});
        }
        return found;
    }

    TrueDetector truth;
    std::vector<Blob> blobs;

private:
    void add_signal(const Blob& blob) {
        const int radius = 12;
        for (int y = blob.y - radius; y <= blob.y + radius; ++y) {
            for (int x = blob.x - radius; x <= blob.x + radius; ++x) {
                const double r2 = (x - blob.x) * (x - blob.x) + (y - blob.y) * (y - blob.y);
                truth.signal_e[static_cast<std::size_t>(y * truth.width + x)] +=
                    static_cast<float>(blob.peak_e() * std::exp(-r2 / (2.0 * kS * kS)));
            }
        }
        truth.echoes.push_back({name(blob.victim), name(blob.source), static_cast<double>(blob.x),
                                static_cast<double>(blob.y), blob.total_e(), blob.peak_e()});
    }

    /// Flags the disc where the response reaches 1; returns its radius in whole pixels.
    static int flag(const Blob& blob, FoundDetector& found) {
        const double strength = std::abs(blob.response);
        if (strength < 1.0) {
            return 0;
        }
        const double r2 = 4.0 * kS * kS * std::log(strength);
        const int reach = static_cast<int>(std::sqrt(r2));
        for (int dy = -reach; dy <= reach; ++dy) {
            for (int dx = -reach; dx <= reach; ++dx) {
                if (dx * dx + dy * dy <= r2) {
                    const int x = blob.x + dx;
                    const int y = blob.y + dy;
                    found.bits[static_cast<std::size_t>(y * 2 * kSide + x)] |=
                        static_cast<std::int16_t>(blob.response < 0.0 ? kNegative : kPositive);
                }
            }
        }
        return reach;
    }
};

}  // namespace straymark::score::test
