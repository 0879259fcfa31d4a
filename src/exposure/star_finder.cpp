#include "exposure/star_finder.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <span>
#include <tuple>

#include "core/robust.h"

namespace straymark {
namespace {

/// A peak pixel stands this far above the noise, and its binomial 3x3 mean so far above its own.
constexpr double kPeakSigma = 5.0;
constexpr double kSmoothedSigma = 8.0;
/// Noise of the binomial mean: sqrt(sum of squared weights) = 6/16.
constexpr double kSmoothedNoise = 0.375;
/// Both pairs of opposite neighbours of a star's peak hold on average at least this part of it
/// (0.21 for a Moffat image of FWHM 1.5 px on a pixel's centre); those of a cosmic ray do not.
constexpr float kLeastNeighbours = 0.15F;
/// Nearer to the border than this a maximum is not looked at.
constexpr int kBorder = 4;
/// Maxima nearer to a brighter one than this are not looked at.
constexpr int kLeastSeparation = 4;
/// Maxima looked at: enough that kMostStars remain after those too near to each other are left out.
constexpr std::size_t kMostMaxima = 512;
constexpr double kFirstSigma = 1.2;
constexpr double kSmallestSigma = 0.5;
constexpr double kLargestSigma = 8.0;
constexpr int kWindowIterations = 8;
constexpr double kConverged = 2e-3;
/// The Gaussian window ends at this many sigmas.
constexpr double kWindowSigmas = 3.5;
constexpr int kMostWindowRadius = 28;
constexpr double kLeastSignalToNoise = 10.0;
/// Isolation is judged between these multiples of the aperture's radius: a pixel is foreign where
/// it exceeds kForeignRatio times its mirror image by kForeignSigma.
constexpr double kForeignInner = 1.0;
constexpr double kForeignOuter = 2.2;
constexpr double kForeignRatio = 2.0;
constexpr double kForeignSigma = 8.0;

struct Maximum {
    int tick = 0;
    int row = 0;
    float smoothed = 0.0F;
};

float smoothed(const AmplifierPlane& plane, int t, int r) {
    const float* below = plane.row(r - 1) + t;
    const float* here = plane.row(r) + t;
    const float* above = plane.row(r + 1) + t;
    return (below[-1] + 2.0F * below[0] + below[1] + 2.0F * here[-1] + 4.0F * here[0] +
            2.0F * here[1] + above[-1] + 2.0F * above[0] + above[1]) *
           0.0625F;
}

bool as_sharp_as_a_cosmic_ray(const AmplifierPlane& plane, int t, int r) {
    const float peak = plane.at(t, r);
    const float along = 0.5F * (plane.at(t - 1, r) + plane.at(t + 1, r));
    const float across = 0.5F * (plane.at(t, r - 1) + plane.at(t, r + 1));
    return !(std::min(along, across) >= kLeastNeighbours * peak);
}

/// Is the smoothed image's maximum of 3 x 3 here? Of equal pixels the last one read counts.
bool is_maximum(const AmplifierPlane& plane, int t, int r, float here) {
    for (int dr = -1; dr <= 1; ++dr) {
        for (int dt = -1; dt <= 1; ++dt) {
            if (dr == 0 && dt == 0) {
                continue;
            }
            const float other = smoothed(plane, t + dt, r + dr);
            const bool earlier = dr < 0 || (dr == 0 && dt < 0);
            if (!(earlier ? here >= other : here > other)) {
                return false;  // also where the other is NaN
            }
        }
    }
    return true;
}

bool block_has_peak(const float* values, int count, float floor) {
    int found = 0;
    for (int k = 0; k < count; ++k) {
        found |= static_cast<int>(values[k] >= floor);
    }
    return found != 0;
}

std::vector<Maximum> find_maxima(const AmplifierPlane& plane, double noise) {
    constexpr int kBlock = 32;
    const auto floor = static_cast<float>(kPeakSigma * noise);
    const auto smoothed_floor = static_cast<float>(kSmoothedSigma * kSmoothedNoise * noise);
    std::vector<Maximum> maxima;
    for (int r = kBorder; r < plane.rows - kBorder; ++r) {
        const float* row = plane.row(r);
        for (int begin = kBorder; begin < plane.ticks - kBorder; begin += kBlock) {
            const int end = std::min(begin + kBlock, plane.ticks - kBorder);
            if (!block_has_peak(row + begin, end - begin, floor)) {
                continue;
            }
            for (int t = begin; t < end; ++t) {
                if (!(row[t] >= floor)) {
                    continue;
                }
                const float here = smoothed(plane, t, r);
                if (here >= smoothed_floor && is_maximum(plane, t, r, here) &&
                    !as_sharp_as_a_cosmic_ray(plane, t, r)) {
                    maxima.push_back({t, r, here});
                }
            }
        }
    }
    return maxima;
}

/// The brightest maxima, brightest first, none within kLeastSeparation of a brighter one.
std::vector<Maximum> choose_maxima(std::vector<Maximum> maxima) {
    const auto brighter = [](const Maximum& a, const Maximum& b) {
        return std::tuple(-a.smoothed, a.row, a.tick) < std::tuple(-b.smoothed, b.row, b.tick);
    };
    const std::size_t looked_at = std::min(maxima.size(), kMostMaxima);
    std::partial_sort(maxima.begin(), maxima.begin() + static_cast<std::ptrdiff_t>(looked_at),
                      maxima.end(), brighter);
    std::vector<Maximum> chosen;
    for (std::size_t k = 0; k < looked_at && chosen.size() < kMostStars; ++k) {
        const Maximum& candidate = maxima[k];
        const bool crowded = std::any_of(chosen.begin(), chosen.end(), [&](const Maximum& other) {
            return std::abs(other.tick - candidate.tick) < kLeastSeparation &&
                   std::abs(other.row - candidate.row) < kLeastSeparation;
        });
        if (!crowded) {
            chosen.push_back(candidate);
        }
    }
    return chosen;
}

/// Moments under a circular Gaussian window.
struct WindowedMoments {
    double sum = 0.0;  ///< of window times signal
    double dx = 0.0;   ///< first moments about the window's centre, pixels
    double dy = 0.0;
    double second = 0.0;       ///< mean second moment of one axis about the window's centre
    double dx_variance = 0.0;  ///< of dx
};

std::optional<WindowedMoments> moments(const AmplifierPlane& plane, const PixelNoise& noise,
                                       double x, double y, double sigma) {
    const int radius = std::min(kMostWindowRadius, static_cast<int>(kWindowSigmas * sigma + 1.5));
    const int x0 = static_cast<int>(std::lround(x)) - radius;
    const int y0 = static_cast<int>(std::lround(y)) - radius;
    if (!plane.holds(x0, y0) || !plane.holds(x0 + 2 * radius, y0 + 2 * radius)) {
        return std::nullopt;
    }
    std::array<float, 2 * kMostWindowRadius + 1> across{};
    for (int k = 0; k <= 2 * radius; ++k) {
        const double d = x0 + k - x;
        across[k] = static_cast<float>(std::exp(-0.5 * d * d / (sigma * sigma)));
    }
    const auto sky_variance = static_cast<float>(noise.noise_adu * noise.noise_adu);
    const auto per_gain = static_cast<float>(1.0 / noise.gain_e_per_adu);
    const auto offset = static_cast<float>(x0 - x);
    double sum = 0.0, sum_x = 0.0, sum_y = 0.0, sum_rr = 0.0, variance = 0.0;
    for (int j = 0; j <= 2 * radius; ++j) {
        const float* row = plane.row(y0 + j) + x0;
        float s0 = 0.0F, s1 = 0.0F, s2 = 0.0F, v2 = 0.0F;
        for (int k = 0; k <= 2 * radius; ++k) {
            const float d = offset + static_cast<float>(k);
            const float ws = across[k] * row[k];
            s0 += ws;
            s1 += ws * d;
            s2 += ws * d * d;
            v2 +=
                across[k] * across[k] * d * d * (sky_variance + std::max(row[k], 0.0F) * per_gain);
        }
        const double dy = y0 + j - y;
        const double w = std::exp(-0.5 * dy * dy / (sigma * sigma));
        sum += w * s0;
        sum_x += w * s1;
        sum_y += w * s0 * dy;
        sum_rr += w * (s2 + s0 * dy * dy);
        variance += w * w * v2;
    }
    if (!(sum > 0.0)) {  // also NaN: a pixel of the window has no value
        return std::nullopt;
    }
    return WindowedMoments{sum, sum_x / sum, sum_y / sum, 0.5 * sum_rr / sum,
                           variance / (sum * sum)};
}

/// Centroid and size by matching the window to the image: under a matched Gaussian window an offset
/// shows at half its size, and the second moment is 1 / (1/image + 1/window).
bool match_window(const AmplifierPlane& plane, const PixelNoise& noise, const Maximum& peak,
                  StarCandidate& star) {
    double x = peak.tick;
    double y = peak.row;
    double sigma = kFirstSigma;
    for (int iteration = 0; iteration < kWindowIterations; ++iteration) {
        const auto m = moments(plane, noise, x, y, sigma);
        if (!m) {
            return false;
        }
        const double second = m->second - 0.5 * (m->dx * m->dx + m->dy * m->dy);
        const double image = 1.0 / second - 1.0 / (sigma * sigma);
        const double matched = image > 0.0 ? 1.0 / std::sqrt(image) : 2.0 * sigma;
        const double next = std::clamp(matched, 0.5 * sigma, 2.0 * sigma);
        const double gain = 1.0 + (next * next) / (sigma * sigma);
        const double step_x = std::clamp(gain * m->dx, -1.0, 1.0);
        const double step_y = std::clamp(gain * m->dy, -1.0, 1.0);
        x += step_x;
        y += step_y;
        if (!(second > 0.0) || next < kSmallestSigma || next > kLargestSigma ||
            std::abs(x - peak.tick) > next + 1.0 || std::abs(y - peak.row) > next + 1.0) {
            return false;
        }
        const bool converged = std::abs(next - sigma) < 10.0 * kConverged * sigma &&
                               std::hypot(step_x, step_y) < kConverged;
        sigma = next;
        star.position_error_px = gain * std::sqrt(m->dx_variance);
        if (converged) {
            break;
        }
    }
    star.tick = x;
    star.row = y;
    star.sigma_px = sigma;
    return true;
}

bool measure_flux(const AmplifierPlane& plane, const PixelNoise& noise, StarCandidate& star) {
    const auto sum = aperture_sum(plane.values.data(), plane.ticks, plane.rows, star.tick, star.row,
                                  star.aperture_px);
    if (!sum || !(sum->flux > 0.0)) {
        return false;
    }
    star.flux_adu = sum->flux;
    const double pixel_variance = noise.noise_adu * noise.noise_adu;
    // pi/2: the median of the annulus is that much less certain than its mean.
    const double sky_variance =
        sum->area_px * sum->area_px * pixel_variance * (M_PI / 2.0) / sum->annulus_px;
    star.flux_error_adu =
        std::sqrt(sum->area_px * pixel_variance + sky_variance + sum->flux / noise.gain_e_per_adu);
    return star.signal_to_noise() >= kLeastSignalToNoise;
}

bool is_isolated(const AmplifierPlane& plane, const PixelNoise& noise, const StarCandidate& star) {
    const double inner = kForeignInner * star.aperture_px;
    const double outer = kForeignOuter * star.aperture_px;
    const auto margin = static_cast<float>(kForeignSigma * noise.noise_adu);
    for (int r = static_cast<int>(star.row - outer); r <= star.row + outer; ++r) {
        for (int t = static_cast<int>(star.tick - outer); t <= star.tick + outer; ++t) {
            const double squared =
                (t - star.tick) * (t - star.tick) + (r - star.row) * (r - star.row);
            if (squared < inner * inner || squared > outer * outer || !plane.holds(t, r)) {
                continue;
            }
            const int mirror_t = static_cast<int>(std::lround(2.0 * star.tick - t));
            const int mirror_r = static_cast<int>(std::lround(2.0 * star.row - r));
            const float mirror =
                plane.holds(mirror_t, mirror_r) ? plane.at(mirror_t, mirror_r) : 0.0F;
            const float allowed = static_cast<float>(kForeignRatio) * std::max(mirror, 0.0F);
            if (!(plane.at(t, r) <= allowed + margin)) {
                return false;  // also a pixel or a mirror image without a value
            }
        }
    }
    return true;
}

double median_sigma(const std::vector<StarCandidate>& stars) {
    std::vector<double> sigmas;
    std::transform(stars.begin(), stars.end(), std::back_inserter(sigmas),
                   [](const StarCandidate& star) { return star.sigma_px; });
    return median_in_place(std::span<double>(sigmas));
}

/// Leaves out what converged to the image of a brighter one.
void drop_repeated(std::vector<StarCandidate>& stars) {
    std::vector<StarCandidate> kept;
    for (const StarCandidate& star : stars) {
        const bool repeated =
            std::any_of(kept.begin(), kept.end(), [&](const StarCandidate& other) {
                return std::hypot(other.tick - star.tick, other.row - star.row) <
                       2.0 * star.sigma_px;
            });
        if (!repeated) {
            kept.push_back(star);
        }
    }
    stars = std::move(kept);
}

}  // namespace

std::optional<ApertureSum> aperture_sum(const float* values, int width, int height, double x,
                                        double y, double radius) {
    const double outer = kAnnulusOuter * radius;
    const double inner = kAnnulusInner * radius;
    ApertureSum sum;
    double weighted = 0.0;
    int expected = 0;
    std::vector<float> annulus;
    for (int j = static_cast<int>(std::floor(y - outer)); j <= y + outer; ++j) {
        for (int i = static_cast<int>(std::floor(x - outer)); i <= x + outer; ++i) {
            const double squared = (i - x) * (i - x) + (j - y) * (j - y);
            const bool in_annulus = squared >= inner * inner && squared <= outer * outer;
            if (!in_annulus && squared >= (radius + 0.5) * (radius + 0.5)) {
                continue;
            }
            const bool there = i >= 0 && j >= 0 && i < width && j < height;
            const float value = there ? values[static_cast<std::ptrdiff_t>(j) * width + i] : NAN;
            if (in_annulus) {
                ++expected;
                if (std::isfinite(value)) {
                    annulus.push_back(value);
                }
            } else if (std::isfinite(value)) {
                const double weight = std::min(1.0, radius + 0.5 - std::sqrt(squared));
                weighted += weight * value;
                sum.area_px += weight;
            } else {
                return std::nullopt;
            }
        }
    }
    sum.annulus_px = double(annulus.size());
    if (2.0 * sum.annulus_px < expected || annulus.empty()) {
        return std::nullopt;
    }
    sum.flux = weighted - sum.area_px * median_in_place(std::span<float>(annulus));
    return sum;
}

std::vector<StarCandidate> find_stars(const AmplifierPlane& signal, const PixelNoise& noise) {
    std::vector<StarCandidate> stars;
    for (const Maximum& peak : choose_maxima(find_maxima(signal, noise.noise_adu))) {
        StarCandidate star;
        if (match_window(signal, noise, peak, star)) {
            stars.push_back(star);
        }
    }
    drop_repeated(stars);
    if (stars.empty()) {
        return stars;
    }
    const double aperture = std::max(2.5, kApertureSigmas * median_sigma(stars));
    std::erase_if(stars, [&](StarCandidate& star) {
        star.aperture_px = aperture;
        return !measure_flux(signal, noise, star);
    });
    for (StarCandidate& star : stars) {
        star.isolated = is_isolated(signal, noise, star);
        star.tick += signal.first_tick;
        star.row += signal.first_row;
    }
    std::sort(stars.begin(), stars.end(), [](const StarCandidate& a, const StarCandidate& b) {
        return std::tuple(-a.flux_adu, a.row, a.tick) < std::tuple(-b.flux_adu, b.row, b.tick);
    });
    return stars;
}

}  // namespace straymark
