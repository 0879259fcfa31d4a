#include "core/robust.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <iterator>
#include <limits>
#include <numbers>
#include <vector>

namespace straymark {
namespace {

template <class Real>
double median_by_selection(std::span<Real> values) {
    assert(!values.empty());
    const auto middle = values.begin() + static_cast<std::ptrdiff_t>(values.size() / 2);
    std::nth_element(values.begin(), middle, values.end());
    const double upper = *middle;
    if (values.size() % 2 == 1) {
        return upper;
    }
    return 0.5 * (upper + *std::max_element(values.begin(), middle));
}

double mad_about(std::span<const double> values, double location) {
    std::vector<double> deviations(values.size());
    std::transform(values.begin(), values.end(), deviations.begin(),
                   [location](double value) { return std::abs(value - location); });
    return median_in_place(deviations);
}

}  // namespace

double median_in_place(std::span<float> values) {
    return median_by_selection(values);
}

double median_in_place(std::span<double> values) {
    return median_by_selection(values);
}

RobustStats biweight(std::span<const double> values) {
    constexpr double kTuning = 4.685;
    constexpr int kMostSteps = 100;
    constexpr double kConverged = 1e-12;  // of the scale
    std::vector<double> finite;
    finite.reserve(values.size());
    std::copy_if(values.begin(), values.end(), std::back_inserter(finite),
                 [](double value) { return std::isfinite(value); });
    if (finite.empty()) {
        const double none = std::numeric_limits<double>::quiet_NaN();
        return {none, none, 0};
    }
    double location = median_in_place(finite);
    const double scale = kMadToSigma * mad_about(finite, location);
    for (int step = 0; scale > 0.0 && step < kMostSteps; ++step) {
        double weights = 0.0;
        double pull = 0.0;
        for (const double value : finite) {
            const double z = (value - location) / (kTuning * scale);
            if (std::abs(z) < 1.0) {
                const double weight = (1.0 - z * z) * (1.0 - z * z);
                weights += weight;
                pull += weight * (value - location);
            }
        }
        const double change = pull / weights;  // the median's neighbours always weigh
        location += change;
        if (std::abs(change) <= kConverged * scale) {
            break;
        }
    }
    return {location, scale, static_cast<int>(finite.size())};
}

double huber_location(std::span<const double> values, double scale, double k) {
    assert(!values.empty() && scale > 0.0 && k > 0.0);
    const double reach = k * scale;
    const auto [least, most] = std::minmax_element(values.begin(), values.end());
    double low = *least;
    double high = *most;
    std::vector<double> ordered(values.begin(), values.end());
    double location = median_in_place(ordered);
    // The summed pull falls with the location and is linear between the points where a value enters
    // or leaves the reach: Newton's step is exact once the right values are within reach.
    constexpr int kMostSteps = 200;
    for (int step = 0; step < kMostSteps && low < high; ++step) {
        double pull = 0.0;
        int within = 0;
        for (const double value : values) {
            const double residual = value - location;
            pull += std::clamp(residual, -reach, reach);
            within += std::abs(residual) < reach ? 1 : 0;
        }
        if (pull == 0.0) {
            break;
        }
        (pull > 0.0 ? low : high) = location;
        double next = within > 0 ? location + pull / within : high + 1.0;
        if (!(next >= low && next <= high)) {
            next = 0.5 * (low + high);
        }
        if (next == location) {
            break;
        }
        location = next;
    }
    return location;
}

namespace {

/// What a few thousand of the values say: where the core is, and whether values come in steps.
struct RoughCore {
    double location = 0.0;
    double scale = 0.0;
    double quantum = 0.0;  ///< step between values; 0: none found
};

/// The step of which all differences between neighbours are multiples; 0 where there is none.
double common_step(std::span<const float> ordered) {
    constexpr double kSameStep = 0.02;  // of the step; raw counts minus a float level are not exact
    double step = 0.0;
    for (std::size_t i = 1; i < ordered.size(); ++i) {
        const double gap = static_cast<double>(ordered[i]) - ordered[i - 1];
        if (gap > 0.0 && (step == 0.0 || gap < step)) {
            step = gap;
        }
    }
    for (std::size_t i = 1; i < ordered.size() && step > 0.0; ++i) {
        const double gaps = (static_cast<double>(ordered[i]) - ordered[i - 1]) / step;
        if (std::abs(gaps - std::round(gaps)) > kSameStep * std::max(1.0, gaps)) {
            return 0.0;
        }
    }
    return step;
}

RoughCore rough_core(std::span<const float> values) {
    constexpr std::size_t kSample = 4096;
    const std::size_t stride = (values.size() + kSample - 1) / kSample;
    std::vector<float> sample;
    sample.reserve(kSample);
    for (std::size_t i = 0; i < values.size(); i += stride) {
        sample.push_back(values[i]);
    }
    std::sort(sample.begin(), sample.end());
    RoughCore core;
    core.location = sample[sample.size() / 2];
    std::vector<double> deviations(sample.size());
    std::transform(sample.begin(), sample.end(), deviations.begin(), [&core](float value) {
        return std::abs(static_cast<double>(value) - core.location);
    });
    core.scale = kMadToSigma * median_in_place(deviations);
    // The core without its tails, which hold gaps of their own.
    const std::size_t first = sample.size() / 40;
    const std::size_t last = sample.size() - sample.size() / 10;
    core.quantum = common_step(std::span(sample).subspan(first, last - first));
    constexpr double kFinest = 1.0 / 64.0;  // finer steps are as good as none
    if (core.quantum < kFinest * core.scale) {
        core.quantum = 0.0;
    }
    // Where most values are one and the same the deviations' median says nothing.
    core.scale = std::max(core.scale, 0.4 * core.quantum);
    return core;
}

/// Counts in bins of one width about the rough core.
struct Histogram {
    double low = 0.0;
    double width = 0.0;
    std::vector<double> counts;
    [[nodiscard]] double edge(std::size_t i) const { return low + width * static_cast<double>(i); }
};

Histogram histogram_about(std::span<const float> values, const RoughCore& core) {
    constexpr double kHalfWidth = 6.0;  // scales
    constexpr double kBinsPerScale = 8.0;
    Histogram histogram;
    histogram.width = core.scale / kBinsPerScale;
    if (core.quantum > 0.0) {
        // Each bin holds the same number of possible values, well inside its edges.
        histogram.width =
            core.quantum * std::max(1.0, std::floor(core.scale / (kBinsPerScale * core.quantum)));
    }
    const double bins_each_side = std::ceil(kHalfWidth * core.scale / histogram.width);
    histogram.low = core.location - 0.5 * core.quantum - bins_each_side * histogram.width;
    histogram.counts.assign(static_cast<std::size_t>(2.0 * bins_each_side) + 1, 0.0);
    const auto bins = static_cast<double>(histogram.counts.size());
    const double per_width = 1.0 / histogram.width;
    for (const float value : values) {
        const double bin = (value - histogram.low) * per_width;
        if (bin >= 0.0 && bin < bins) {
            histogram.counts[static_cast<std::size_t>(bin)] += 1.0;
        }
    }
    return histogram;
}

/// Shares of the bins of a window, under the normal core and under the tail; each sums to 1.
struct BinShares {
    std::vector<double> core, tail;
};

BinShares shares(const Histogram& histogram, std::size_t first, std::size_t end, double location,
                 double scale) {
    BinShares out;
    out.core.resize(end - first);
    out.tail.resize(end - first);
    double core_below = 0.0;
    double tail_below = 0.0;
    double core_first = 0.0;
    double tail_first = 0.0;
    for (std::size_t i = first; i <= end; ++i) {
        const double z = (histogram.edge(i) - location) / scale;
        const double core = 0.5 * std::erfc(-z / std::numbers::sqrt2);
        const double density = std::exp(-0.5 * z * z) / std::sqrt(2.0 * std::numbers::pi);
        const double tail = z * core + density;  // the integral of the core's distribution
        if (i == first) {
            core_first = core;
            tail_first = tail;
        } else {
            out.core[i - first - 1] = core - core_below;
            out.tail[i - first - 1] = tail - tail_below;
        }
        core_below = core;
        tail_below = tail;
    }
    for (double& share : out.core) {
        share /= core_below - core_first;
    }
    for (double& share : out.tail) {
        share /= tail_below - tail_first;
    }
    return out;
}

/// The fraction of tail that makes the counts most likely: Newton's method on a concave function.
double tail_fraction(std::span<const double> counts, const BinShares& share, double start) {
    constexpr double kMost = 0.9;
    double fraction = start;
    for (int step = 0; step < 50; ++step) {
        double slope = 0.0;
        double curvature = 0.0;
        for (std::size_t i = 0; i < counts.size(); ++i) {
            const double change = share.tail[i] - share.core[i];
            const double expected = share.core[i] + fraction * change;
            if (counts[i] > 0.0 && expected > 0.0) {
                slope += counts[i] * change / expected;
                curvature += counts[i] * (change / expected) * (change / expected);
            }
        }
        if (curvature <= 0.0) {
            break;
        }
        const double next = std::clamp(fraction + slope / curvature, 0.0, kMost);
        const bool settled = std::abs(next - fraction) < 1e-7;
        fraction = next;
        if (settled) {
            break;
        }
    }
    return fraction;
}

struct Moments {
    double mean = 0.0;
    double variance = 0.0;
};

Moments moments(std::span<const double> weights) {
    double sum = 0.0;
    double first = 0.0;
    double second = 0.0;
    for (std::size_t i = 0; i < weights.size(); ++i) {
        const auto x = static_cast<double>(i);
        sum += weights[i];
        first += weights[i] * x;
        second += weights[i] * x * x;
    }
    const double mean = first / sum;
    return {mean, std::max(0.0, second / sum - mean * mean)};
}

/// Moves location and scale until the core's part of the counts in the window has the moments that
/// a normal has in the same bins.
void fit_core(const Histogram& histogram, double& location, double& scale) {
    constexpr double kWindow = 3.0;  // scales
    constexpr double kConverged = 1e-6;
    constexpr std::size_t kFewestBins = 5;  // fewer cannot tell a tail from a shifted core
    const auto bins = static_cast<double>(histogram.counts.size());
    double fraction = 0.0;
    for (int step = 0; step < 100; ++step) {
        const double low = (location - kWindow * scale - histogram.low) / histogram.width;
        const double high = (location + kWindow * scale - histogram.low) / histogram.width;
        const auto first = static_cast<std::size_t>(std::clamp(std::floor(low), 0.0, bins - 1.0));
        const auto end = static_cast<std::size_t>(
            std::clamp(std::ceil(high), static_cast<double>(first) + 1.0, bins));
        const std::span<const double> counts =
            std::span(histogram.counts).subspan(first, end - first);
        const BinShares share = shares(histogram, first, end, location, scale);
        fraction = counts.size() < kFewestBins ? 0.0 : tail_fraction(counts, share, fraction);
        std::vector<double> core_counts(counts.size());
        for (std::size_t i = 0; i < counts.size(); ++i) {
            const double core = (1.0 - fraction) * share.core[i];
            const double all = core + fraction * share.tail[i];
            core_counts[i] = all > 0.0 ? counts[i] * core / all : 0.0;
        }
        const Moments found = moments(core_counts);
        const Moments expected = moments(share.core);
        if (!(found.variance > 0.0 && expected.variance > 0.0)) {
            return;  // all in one bin: what is known already is all there is to know
        }
        const double shift = (found.mean - expected.mean) * histogram.width;
        const double stretch = std::clamp(std::sqrt(found.variance / expected.variance), 0.5, 2.0);
        location += shift;
        scale *= stretch;
        if (std::abs(shift) < kConverged * scale && std::abs(stretch - 1.0) < kConverged) {
            return;
        }
    }
}

}  // namespace

RobustStats clipped_normal(std::span<const float> values) {
    constexpr std::size_t kMostLooked = 131072;
    // Odd, so that it does not fall in step with the even lengths of image rows.
    const std::size_t stride = ((values.size() + kMostLooked - 1) / kMostLooked) | 1U;
    std::vector<float> looked;
    looked.reserve(values.size() / stride + 1);
    for (std::size_t i = 0; i < values.size(); i += stride) {
        if (std::isfinite(values[i])) {
            looked.push_back(values[i]);
        }
    }
    RobustStats stats{std::numeric_limits<double>::quiet_NaN(),
                      std::numeric_limits<double>::quiet_NaN(), static_cast<int>(looked.size())};
    if (looked.empty()) {
        return stats;
    }
    const RoughCore core = rough_core(looked);
    stats.location = core.location;
    stats.scale = core.scale;
    if (core.scale > 0.0) {
        fit_core(histogram_about(looked, core), stats.location, stats.scale);
    }
    return stats;
}

}  // namespace straymark
