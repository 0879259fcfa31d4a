#include "score/strengths.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstddef>
#include <limits>

namespace straymark::score {
namespace {

constexpr double kNan = std::numeric_limits<double>::quiet_NaN();
constexpr double kMadToSigma = 1.4826022185056018;  // of a normal
constexpr double kTukey = 4.685;                    // 95 % efficient for a normal
constexpr int kPairsThatShowScatter = 5;

/// The prediction's own fraction: it does not depend on the slope, so it weights without bias.
double fractional_error(const StrengthMatch& match) {
    const double fraction = std::abs(match.error_e / match.predicted_e);
    return std::isfinite(fraction) ? std::max(fraction, kSmallestFraction) : 1.0;
}

double weighted_median(std::vector<Slope> slopes) {
    std::sort(slopes.begin(), slopes.end(),
              [](const Slope& a, const Slope& b) { return a.value < b.value; });
    double total = 0.0;
    for (const Slope& slope : slopes) {
        total += 1.0 / (slope.error * slope.error);
    }
    double below = 0.0;
    for (const Slope& slope : slopes) {
        below += 1.0 / (slope.error * slope.error);
        if (below >= 0.5 * total) {
            return slope.value;
        }
    }
    return slopes.back().value;
}

/// Scatter of the pairs in units of their errors, at least 1.
double scatter_about(const std::vector<Slope>& slopes, double centre) {
    if (slopes.size() < kPairsThatShowScatter) {
        return 1.0;
    }
    std::vector<double> deviations;
    deviations.reserve(slopes.size());
    for (const Slope& slope : slopes) {
        deviations.push_back(std::abs(slope.value - centre) / slope.error);
    }
    const auto middle = deviations.begin() + static_cast<std::ptrdiff_t>(deviations.size() / 2);
    std::nth_element(deviations.begin(), middle, deviations.end());
    return std::max(1.0, kMadToSigma * *middle);
}

}  // namespace

Slope pair_slope(std::span<const StrengthMatch> matches) {
    assert(!matches.empty());
    double weights = 0.0;
    double ratios = 0.0;
    double errors = 0.0;
    for (const StrengthMatch& match : matches) {
        const double fraction = fractional_error(match);
        const double weight = 1.0 / (fraction * fraction);
        weights += weight;
        ratios += weight * match.predicted_e / match.truth_e;
        errors += weight * fraction;
    }
    return {ratios / weights, errors / weights, 1, static_cast<std::int64_t>(matches.size())};
}

Slope slope_over_pairs(std::span<const StrengthMatch> matches) {
    std::vector<Slope> slopes;
    for (const auto& [name, members] : by_pair(matches)) {
        slopes.push_back(pair_slope(members));
    }
    if (slopes.empty()) {
        return {kNan, kNan, 0, 0};
    }
    double centre = weighted_median(slopes);
    const double scatter = scatter_about(slopes, centre);
    double weights = 0.0;
    constexpr int kIterations = 30;
    for (int iteration = 0; iteration < kIterations; ++iteration) {
        weights = 0.0;
        double sum = 0.0;
        for (const Slope& slope : slopes) {
            const double u = (slope.value - centre) / (kTukey * scatter * slope.error);
            const double robust = std::abs(u) < 1.0 ? (1.0 - u * u) * (1.0 - u * u) : 0.0;
            weights += robust / (slope.error * slope.error);
            sum += robust * slope.value / (slope.error * slope.error);
        }
        centre = weights > 0.0 ? sum / weights : centre;
    }
    const double error = weights > 0.0 ? scatter / std::sqrt(weights) : kNan;
    return {centre, error, static_cast<std::int64_t>(slopes.size()),
            static_cast<std::int64_t>(matches.size())};
}

std::map<PairName, std::vector<StrengthMatch>> by_pair(std::span<const StrengthMatch> matches) {
    std::map<PairName, std::vector<StrengthMatch>> pairs;
    for (const StrengthMatch& match : matches) {
        pairs[{match.victim, match.source}].push_back(match);
    }
    return pairs;
}

std::map<std::string, std::vector<StrengthMatch>> by_victim(
    std::span<const StrengthMatch> matches) {
    std::map<std::string, std::vector<StrengthMatch>> victims;
    for (const StrengthMatch& match : matches) {
        victims[match.victim].push_back(match);
    }
    return victims;
}

Pulls pulls_of(std::span<const StrengthMatch> matches) {
    Pulls pulls;
    double sum = 0.0;
    double squares = 0.0;
    for (const StrengthMatch& match : matches) {
        if (match.error_e > 0.0) {
            const double pull = (match.predicted_e - match.truth_e) / match.error_e;
            sum += pull;
            squares += pull * pull;
            ++pulls.count;
        }
    }
    const auto count = static_cast<double>(pulls.count);
    pulls.mean = pulls.count > 0 ? sum / count : kNan;
    pulls.rms = pulls.count > 0 ? std::sqrt(squares / count) : kNan;
    return pulls;
}

}  // namespace straymark::score
