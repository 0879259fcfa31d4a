#include "exposure/psf_measure.h"

#include <algorithm>
#include <cmath>
#include <limits>
#include <numeric>
#include <span>

#include "core/robust.h"
#include "exposure/moffat_fit.h"

namespace straymark {
namespace {

constexpr double kGridFwhms = 4.5;
constexpr int kLeastRadius = 10;
constexpr int kMostRadius = 32;
constexpr double kLeastSignalToNoise = 20.0;
/// Images whose size differs more from the median are not single stars.
constexpr double kSizeTolerance = 0.15;
/// Stars used for the profile and pixels of them, at most: enough for 0.3 % in its width.
constexpr std::size_t kMostStars = 80;
constexpr double kMostPixels = 12000.0;
constexpr std::size_t kLeastFitted = 12;
/// The profile is fitted within this many FWHM of each star.
constexpr double kFitFwhms = 3.0;
constexpr double kLeastFitRadius = 4.0;
/// A star whose misfit is this many times that of the so many stars just brighter and fainter is
/// not one, or not alone.
constexpr double kMostMisfit = 2.0;
constexpr std::size_t kMisfitNeighbours = 5;
/// The table of what stars show beyond the profile is improved this often, at most, and as long as
/// more than this part of what is found somewhere, over so many pixels to each side, is not noise.
constexpr int kMostPasses = 4;
constexpr double kLittle = 0.3;
constexpr int kNeighbourhood = 2;
/// Stack pixels farther from their median than this many errors are left out.
constexpr double kStackClip = 4.0;

/// The stars of the commonest size, best first; at most kMostStars.
std::vector<StarStamp> alike(std::vector<StarStamp> stamps) {
    std::erase_if(stamps, [](const StarStamp& stamp) {
        return !(stamp.signal_to_noise >= kLeastSignalToNoise);
    });
    if (stamps.empty()) {
        return stamps;
    }
    std::vector<double> sizes;
    std::transform(stamps.begin(), stamps.end(), std::back_inserter(sizes),
                   [](const StarStamp& stamp) { return stamp.sigma_px; });
    const double median = median_in_place(std::span<double>(sizes));
    std::erase_if(stamps, [median](const StarStamp& stamp) {
        return std::abs(stamp.sigma_px / median - 1.0) > kSizeTolerance;
    });
    std::stable_sort(stamps.begin(), stamps.end(), [](const StarStamp& a, const StarStamp& b) {
        return a.signal_to_noise > b.signal_to_noise;
    });
    if (stamps.size() > kMostStars) {
        stamps.resize(kMostStars);
    }
    return stamps;
}

double median_fwhm(const std::vector<StarStamp>& stamps) {
    std::vector<double> sizes;
    std::transform(stamps.begin(), stamps.end(), std::back_inserter(sizes),
                   [](const StarStamp& stamp) { return stamp.sigma_px * kSigmaToFwhm; });
    return median_in_place(std::span<double>(sizes));
}

/// Median misfit of the stars whose signal to noise is next to that of star s (they are in its
/// order): what the profile lacks shows the more, the brighter the star.
double usual_misfit(const std::vector<StarFit>& stars, std::size_t s) {
    const std::size_t first = s < kMisfitNeighbours ? 0 : s - kMisfitNeighbours;
    const std::size_t end = std::min(stars.size(), s + kMisfitNeighbours + 1);
    std::vector<double> misfits;
    for (std::size_t k = first; k < end; ++k) {
        misfits.push_back(stars[k].misfit);
    }
    return median_in_place(std::span<double>(misfits));
}

/// The stamps that the profile fits as well as it fits others as bright, with the centroids and
/// fluxes of the fit.
std::vector<StarStamp> fitting(std::vector<StarStamp> stamps, const MoffatFit& fit) {
    std::vector<StarStamp> kept;
    for (std::size_t s = 0; s < stamps.size(); ++s) {
        const StarFit& star = fit.stars[s];
        if (star.misfit <= kMostMisfit * std::max(1.0, usual_misfit(fit.stars, s)) &&
            star.amplitude_adu > 0.0) {
            kept.push_back(std::move(stamps[s]));
            kept.back().dx = star.dx;
            kept.back().dy = star.dy;
            kept.back().flux_adu = star.amplitude_adu * fit.shape.volume();
        }
    }
    return kept;
}

/// What one star shows beyond the profile at one pixel of the grid, for a star of flux one.
struct Excess {
    float value = 0.0F;
    float variance = 0.0F;
};

/// Bilinear between the four stamp pixels about the grid pixel; NaN where one has no value.
Excess excess_at(const StarStamp& stamp, const std::vector<float>& residual, const StarFit& star,
                 double flux, double expected, int i, int j) {
    constexpr float kNaN = std::numeric_limits<float>::quiet_NaN();
    const double x = i + star.dx;
    const double y = j + star.dy;
    const int x0 = static_cast<int>(std::floor(x));
    const int y0 = static_cast<int>(std::floor(y));
    if (x0 < -stamp.radius || y0 < -stamp.radius || x0 + 1 > stamp.radius ||
        y0 + 1 > stamp.radius) {
        return {kNaN, 0.0F};
    }
    const double fx = x - x0;
    const double fy = y - y0;
    const std::size_t index =
        static_cast<std::size_t>(y0 + stamp.radius) * static_cast<std::size_t>(stamp.side()) +
        static_cast<std::size_t>(x0 + stamp.radius);
    const std::size_t above = index + static_cast<std::size_t>(stamp.side());
    const double value = (1.0 - fy) * ((1.0 - fx) * residual[index] + fx * residual[index + 1]) +
                         fy * ((1.0 - fx) * residual[above] + fx * residual[above + 1]);
    const double variance = stamp.noise.noise_adu * stamp.noise.noise_adu +
                            expected * flux / stamp.noise.gain_e_per_adu;
    return {static_cast<float>(value / flux), static_cast<float>(variance / (flux * flux))};
}

/// Weighted mean of what agrees, and its error; no value: zero with an infinite error.
struct Stacked {
    double value = 0.0;
    double error = std::numeric_limits<double>::infinity();
};

Stacked stack_pixel(const std::vector<Excess>& excesses, std::vector<float>& scratch) {
    scratch.clear();
    for (const Excess& e : excesses) {
        scratch.push_back(e.value);
    }
    if (scratch.empty()) {
        return {};
    }
    const double median = median_in_place(std::span<float>(scratch));
    for (float& value : scratch) {
        value = std::abs(value - static_cast<float>(median));
    }
    // A star may miss the profile by more than its noise: the scatter seen counts as well.
    const double scatter = kMadToSigma * median_in_place(std::span<float>(scratch));
    double sum = 0.0;
    double weights = 0.0;
    for (const Excess& e : excesses) {
        const double error = std::max(std::sqrt(double(e.variance)), scatter);
        if (std::abs(e.value - median) <= kStackClip * error) {
            sum += e.value / e.variance;
            weights += 1.0 / e.variance;
        }
    }
    return weights > 0.0 ? Stacked{sum / weights, 1.0 / std::sqrt(weights)} : Stacked{};
}

/// A square grid about a centre.
struct Grid {
    explicit Grid(int r)
        : radius(r),
          values(static_cast<std::size_t>(2 * r + 1) * static_cast<std::size_t>(2 * r + 1)) {}
    [[nodiscard]] double& at(int i, int j) {
        return values[(j + radius) * (2 * radius + 1) + i + radius];
    }
    [[nodiscard]] double at(int i, int j) const {
        return values[(j + radius) * (2 * radius + 1) + i + radius];
    }
    [[nodiscard]] bool holds(int i, int j) const {
        return std::abs(i) <= radius && std::abs(j) <= radius;
    }
    int radius;
    std::vector<double> values;
};

/// How much of the values about (i, j) is more than noise: the positive-part estimator of James &
/// Stein 1961 (4th Berkeley Symp. 1, 361) on the neighbourhood. squares: of values in errors.
double beyond_noise(const Grid& squares, int i, int j) {
    double sum = 0.0;
    int count = 0;
    for (int y = j - kNeighbourhood; y <= j + kNeighbourhood; ++y) {
        for (int x = i - kNeighbourhood; x <= i + kNeighbourhood; ++x) {
            if (squares.holds(x, y)) {
                sum += squares.at(x, y);
                ++count;
            }
        }
    }
    return sum > count ? 1.0 - count / sum : 0.0;
}

/// A profile and a table of what stars show beyond it.
class Image {
public:
    Image(const std::vector<StarStamp>& stamps, const MoffatFit& fit, int radius)
        : shape_(fit.shape),
          quadrature_(PixelQuadrature::for_fwhm(fit.shape.fwhm())),
          volume_(fit.shape.volume()),
          table_(radius) {
        // A stack between pixels smooths what it finds; what it lost shows in the next one.
        for (int pass = 0; pass < kMostPasses && improve(stamps, fit); ++pass) {
        }
    }

    [[nodiscard]] double profile(double dx, double dy) const {
        return quadrature_.value(shape_, dx, dy) / volume_;
    }
    /// At any offset: the profile plus the table, bilinear.
    [[nodiscard]] double at(double dx, double dy) const {
        const int i = static_cast<int>(std::floor(dx));
        const int j = static_cast<int>(std::floor(dy));
        const double fx = dx - i;
        const double fy = dy - j;
        return profile(dx, dy) + (1.0 - fy) * ((1.0 - fx) * table(i, j) + fx * table(i + 1, j)) +
               fy * ((1.0 - fx) * table(i, j + 1) + fx * table(i + 1, j + 1));
    }

private:
    [[nodiscard]] double table(int i, int j) const {
        return table_.holds(i, j) ? table_.at(i, j) : 0.0;
    }

    /// Adds to the table what the stars show beyond it; false where that is noise.
    bool improve(const std::vector<StarStamp>& stamps, const MoffatFit& fit) {
        std::vector<std::vector<float>> residuals;
        for (std::size_t s = 0; s < stamps.size(); ++s) {
            residuals.push_back(residual_of(stamps[s], fit.stars[s]));
        }
        Grid found(table_.radius);
        Grid squares(table_.radius);
        std::vector<Excess> excesses;
        std::vector<float> scratch;
        for (int j = -table_.radius; j <= table_.radius; ++j) {
            for (int i = -table_.radius; i <= table_.radius; ++i) {
                const double expected = profile(i, j);
                excesses.clear();
                for (std::size_t s = 0; s < stamps.size(); ++s) {
                    const Excess e =
                        excess_at(stamps[s], residuals[s], fit.stars[s],
                                  fit.stars[s].amplitude_adu * volume_, expected, i, j);
                    if (std::isfinite(e.value)) {
                        excesses.push_back(e);
                    }
                }
                const Stacked stacked = stack_pixel(excesses, scratch);
                const double noise_over_profile = stacked.error / expected;
                found.at(i, j) = stacked.value / (1.0 + noise_over_profile * noise_over_profile);
                squares.at(i, j) = std::pow(stacked.value / stacked.error, 2);
            }
        }
        return add(found, squares);
    }

    bool add(const Grid& found, const Grid& squares) {
        bool changed = false;
        for (int j = -table_.radius; j <= table_.radius; ++j) {
            for (int i = -table_.radius; i <= table_.radius; ++i) {
                const double part = beyond_noise(squares, i, j);
                table_.at(i, j) += part * found.at(i, j);
                changed = changed || part > kLittle;
            }
        }
        return changed;
    }

    [[nodiscard]] std::vector<float> residual_of(const StarStamp& stamp,
                                                 const StarFit& star) const {
        const double flux = star.amplitude_adu * volume_;
        std::vector<float> residual;
        residual.reserve(stamp.values.size());
        for (int j = -stamp.radius; j <= stamp.radius; ++j) {
            for (int i = -stamp.radius; i <= stamp.radius; ++i) {
                const double model = star.background_adu + flux * at(i - star.dx, j - star.dy);
                residual.push_back(stamp.at(i, j) - static_cast<float>(model));
            }
        }
        return residual;
    }

    MoffatShape shape_;
    PixelQuadrature quadrature_;
    double volume_;
    Grid table_;
};

/// Twice the mean distance, over directions, at which the image falls to half its central value.
double full_width(const Image& image, double limit) {
    constexpr int kDirections = 16;
    constexpr int kHalvings = 24;
    const double half = 0.5 * image.at(0.0, 0.0);
    double sum = 0.0;
    for (int d = 0; d < kDirections; ++d) {
        const double angle = 2.0 * M_PI * d / kDirections;
        double low = 0.0;
        double high = limit;
        for (int k = 0; k < kHalvings; ++k) {
            const double middle = 0.5 * (low + high);
            const bool inside = image.at(middle * std::cos(angle), middle * std::sin(angle)) > half;
            (inside ? low : high) = middle;
        }
        sum += low;
    }
    return 2.0 * sum / kDirections;
}

/// As many of the stamps, best first, as there is time to fit.
std::vector<StarStamp> affordable(std::vector<StarStamp> stamps, double radius_px) {
    const auto most = static_cast<std::size_t>(kMostPixels / (M_PI * radius_px * radius_px));
    if (stamps.size() > std::max(kLeastFitted, most)) {
        stamps.resize(std::max(kLeastFitted, most));
    }
    return stamps;
}

}  // namespace

int psf_radius(double fwhm_px) {
    return std::clamp(static_cast<int>(std::ceil(kGridFwhms * fwhm_px)), kLeastRadius, kMostRadius);
}

void normalize_psf(Psf& psf) {
    const double sum = std::accumulate(psf.values.begin(), psf.values.end(), 0.0);
    double squares = 0.0;
    for (float& value : psf.values) {
        value = static_cast<float>(value / sum);
        squares += double(value) * double(value);
    }
    psf.noise_equivalent_area_px = 1.0 / squares;
}

Psf measure_psf(std::vector<StarStamp> stamps) {
    stamps = alike(std::move(stamps));
    Psf psf;
    if (stamps.size() < kLeastPsfStars) {
        return psf;
    }
    const double fwhm = median_fwhm(stamps);
    const double radius = std::max(kFitFwhms * fwhm, kLeastFitRadius);
    stamps = affordable(std::move(stamps), radius);
    const MoffatFit first = fit_moffat(stamps, MoffatShape::circular(fwhm, kSeeingBeta), radius);
    stamps = fitting(std::move(stamps), first);
    if (stamps.size() < kLeastPsfStars || !first.shape.valid()) {
        return psf;
    }
    const MoffatFit fit = fit_moffat(stamps, first.shape, radius);
    psf.source = PsfSource::measured;
    psf.stars = static_cast<int>(stamps.size());
    psf.radius = psf_radius(fit.shape.fwhm());
    const Image image(stamps, fit, psf.radius);
    for (int j = -psf.radius; j <= psf.radius; ++j) {
        for (int i = -psf.radius; i <= psf.radius; ++i) {
            psf.values.push_back(static_cast<float>(image.at(i, j)));
        }
    }
    normalize_psf(psf);
    psf.fwhm_px = full_width(image, psf.radius);
    return psf;
}

}  // namespace straymark
