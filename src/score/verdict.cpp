#include "score/verdict.h"

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <fmt/format.h>
#include <limits>
#include <map>
#include <optional>

#include "score/strengths.h"

namespace straymark::score {
namespace {

std::string percent(double fraction) {
    return std::isnan(fraction) ? "nothing to judge" : fmt::format("{:.2f} %", 100.0 * fraction);
}

Figure pixel_completeness(const Tally& total) {
    const double value = ratio_of(total.pixels.required_flagged, total.pixels.required);
    return {"pixel_completeness",
            fmt::format("true pixels of response {} or more that are flagged", kRequiredResponse),
            value,
            percent(value),
            ">= 98 %",
            value >= kLeastCompleteness,
            {}};
}

Figure echo_completeness(const Tally& total) {
    const double value =
        ratio_of(echoes_found(total.echoes), static_cast<std::int64_t>(total.echoes.echoes.size()));
    return {"echo_completeness",
            fmt::format("true echoes of response {} or more, flagged and listed as marks",
                        kRequiredResponse),
            value,
            percent(value),
            ">= 98 %",
            value >= kLeastCompleteness,
            {}};
}

Figure area_ratio(const Tally& total) {
    const double value = ratio_of(total.pixels.flagged_area, total.pixels.true_area);
    return {"area_ratio",
            fmt::format("flagged area over true area of response {} or more", kTrueResponse),
            value,
            std::isnan(value) ? "nothing to judge" : fmt::format("{:.3f}", value),
            "<= 1.15",
            value <= kLargestAreaRatio,
            {}};
}

Figure pooled_slope(const Tally& total) {
    const Slope slope = slope_over_pairs(total.echoes.strengths);
    return {"slope",
            "slope of predicted on true strength, all pairs",
            slope.value,
            slope.pairs == 0 ? "nothing to judge"
                             : fmt::format("{:.4f} +- {:.4f}", slope.value, slope.error),
            "1 +- 0.05",
            std::abs(slope.value - 1.0) <= kSlopeTolerance,
            {}};
}

bool is_wrong(const Slope& slope, double tolerance) {
    const double off = std::abs(slope.value - 1.0);
    return off > tolerance && off > kWrongByErrors * slope.error;
}

/// A figure of the kind "none of these is wrong"; its value is the number of wrong ones.
Figure none_wrong(const std::string& name, const std::string& text, const std::string& target,
                  std::size_t judged, std::vector<std::string> offenders) {
    const std::size_t wrong = offenders.size();
    return {name,
            text,
            static_cast<double>(wrong),
            judged == 0 ? "nothing to judge" : fmt::format("{} of {} wrong", wrong, judged),
            target,
            judged > 0 && wrong == 0,
            std::move(offenders)};
}

Figure amplifier_slopes(const Tally& total) {
    const auto victims = by_victim(total.echoes.strengths);
    std::vector<std::string> offenders;
    for (const auto& [name, matches] : victims) {
        const Slope slope = slope_over_pairs(matches);
        if (is_wrong(slope, kSlopeTolerance)) {
            offenders.push_back(fmt::format("{}: slope {:.3f} +- {:.3f} over {} pairs", name,
                                            slope.value, slope.error, slope.pairs));
        }
    }
    return none_wrong("amplifier_slopes", "slope of each victim amplifier",
                      "none off by 5 % and 5 errors", victims.size(), std::move(offenders));
}

Figure amplifier_gains(const Tally& total) {
    std::map<std::string, double> worst;  // the ratio farthest from 1
    for (const AmplifierCheck& check : total.amplifiers) {
        if (!check.stated) {
            continue;
        }
        const auto [entry, fresh] = worst.emplace(check.name, check.gain_ratio);
        if (!fresh && !(std::abs(check.gain_ratio - 1.0) <= std::abs(entry->second - 1.0))) {
            entry->second = check.gain_ratio;
        }
    }
    std::vector<std::string> offenders;
    for (const auto& [name, ratio] : worst) {
        if (!(std::abs(ratio - 1.0) <= kGainTolerance)) {
            offenders.push_back(fmt::format("{}: gain {:.3f} times the true one", name, ratio));
        }
    }
    return none_wrong("amplifier_gains", "gain of each amplifier, in the mask's DETECTION table",
                      "none off by 5 %", worst.size(), std::move(offenders));
}

double median(std::vector<double> values) {
    std::sort(values.begin(), values.end());
    const std::size_t half = values.size() / 2;
    return values.size() % 2 == 1 ? values[half] : 0.5 * (values[half - 1] + values[half]);
}

/// What is wrong with the places of one pair's echoes.
std::optional<std::string> places_wrong(const std::vector<RequiredEcho>& echoes) {
    std::vector<double> dx;
    std::vector<double> dy;
    std::int64_t found = 0;
    for (const RequiredEcho& echo : echoes) {
        found += echo.flagged && echo.listed ? 1 : 0;
        if (echo.place_judged) {
            dx.push_back(echo.dx_px);
            dy.push_back(echo.dy_px);
        }
    }
    if (echoes.size() >= kEchoesForMissed && 2 * found < static_cast<std::int64_t>(echoes.size())) {
        return fmt::format("{} of {} echoes found", found, echoes.size());
    }
    if (dx.size() >= kEchoesForPlace) {
        const double x = median(dx);
        const double y = median(dy);
        std::size_t shared = 0;
        for (std::size_t i = 0; i < dx.size(); ++i) {
            shared += std::abs(dx[i] - x) <= 0.5 && std::abs(dy[i] - y) <= 0.5 ? 1 : 0;
        }
        if (std::max(std::abs(x), std::abs(y)) >= kMisplacedPx &&
            static_cast<double>(shared) >= kSharedOffset * static_cast<double>(dx.size())) {
            return fmt::format("marks off by ({:+.1f}, {:+.1f}) px over {} echoes", x, y,
                               dx.size());
        }
    }
    return std::nullopt;
}

Figure pairs(const Tally& total) {
    std::map<PairName, std::vector<RequiredEcho>> echoes;
    for (const RequiredEcho& echo : total.echoes.echoes) {
        echoes[{echo.victim, echo.source}].push_back(echo);
    }
    const auto strengths = by_pair(total.echoes.strengths);
    std::vector<std::string> offenders;
    for (const auto& [name, members] : echoes) {
        std::optional<std::string> wrong = places_wrong(members);
        if (const auto matches = strengths.find(name); !wrong && matches != strengths.end()) {
            const Slope slope = pair_slope(matches->second);
            if (is_wrong(slope, kPairTolerance)) {
                wrong = fmt::format("slope {:.3f} +- {:.3f}", slope.value, slope.error);
            }
        }
        if (wrong) {
            offenders.push_back(fmt::format("{} to {}: {}", name.second, name.first, *wrong));
        }
    }
    return none_wrong("pairs", "amplifier pairs with true echoes",
                      "none missed, misplaced, or off by 25 % and 5 errors", echoes.size(),
                      std::move(offenders));
}

}  // namespace

double ratio_of(std::int64_t numerator, std::int64_t denominator) {
    if (denominator == 0 && numerator == 0) {
        return std::numeric_limits<double>::quiet_NaN();
    }
    return static_cast<double>(numerator) / static_cast<double>(denominator);
}

std::int64_t echoes_found(const EchoTally& tally) {
    return std::count_if(tally.echoes.begin(), tally.echoes.end(),
                         [](const RequiredEcho& echo) { return echo.flagged && echo.listed; });
}

std::vector<Figure> figures_of(const Tally& total) {
    return {
        pixel_completeness(total), echo_completeness(total), area_ratio(total), pooled_slope(total),
        amplifier_slopes(total),   amplifier_gains(total),   pairs(total)};
}

bool all_met(const std::vector<Figure>& figures) {
    return std::all_of(figures.begin(), figures.end(),
                       [](const Figure& figure) { return figure.met; });
}

}  // namespace straymark::score
