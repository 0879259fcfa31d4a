#include "score/report.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstddef>
#include <cstdint>
#include <fmt/format.h>
#include <functional>
#include <iterator>
#include <string_view>
#include <utility>

#include "score/strengths.h"

namespace straymark::score {
namespace {

constexpr std::size_t kMostOffendersShown = 8;

std::string percent(std::int64_t part, std::int64_t whole) {
    const double ratio = ratio_of(part, whole);
    return std::isnan(ratio) ? "-" : fmt::format("{:.2f} %", 100.0 * ratio);
}

std::string bin_name(std::size_t bin) {
    return bin + 1 < kResponseEdges.size()
               ? fmt::format("{} to {}", kResponseEdges[bin], kResponseEdges[bin + 1])
               : fmt::format("{} and more", kResponseEdges[bin]);
}

void add_figures(const NightScore& night, std::string& text) {
    text += fmt::format("{}: masks of {} exposures against the truth\n\n", night.kind,
                        night.exposures.size());
    for (const Figure& figure : night.figures) {
        text += fmt::format("  {:<8} {:<20} {} ({})\n", figure.met ? "met" : "NOT MET",
                            figure.shown, figure.text, figure.target);
        const std::size_t shown = std::min(figure.offenders.size(), kMostOffendersShown);
        for (std::size_t i = 0; i < shown; ++i) {
            text += fmt::format("           {}\n", figure.offenders[i]);
        }
        if (shown < figure.offenders.size()) {
            text += fmt::format("           and {} more\n", figure.offenders.size() - shown);
        }
    }
}

void add_bins(const PixelTally& pixels, std::string& text) {
    text += fmt::format("\n  {:<14} {:>10} {:>10} {:>10} {:>10}\n", "true response", "pixels",
                        "flagged", "marginal", "unassessed");
    for (std::size_t i = 0; i < pixels.bins.size(); ++i) {
        const ResponseBin& bin = pixels.bins[i];
        text += fmt::format("  {:<14} {:>10} {:>10} {:>10} {:>10}\n", bin_name(i), bin.pixels,
                            percent(bin.flagged, bin.pixels), percent(bin.marginal, bin.pixels),
                            percent(bin.unassessed, bin.pixels));
    }
}

template <typename Reason, std::size_t N>
void add_reasons(const std::array<std::int64_t, N>& counts, const std::string& title,
                 std::string& text) {
    text += fmt::format("\n  {}\n", title);
    bool any = false;
    for (std::size_t i = 0; i < N; ++i) {
        if (counts[i] > 0) {
            text += fmt::format("  {:>10}  {}\n", counts[i], text_of(static_cast<Reason>(i)));
            any = true;
        }
    }
    if (!any) {
        text += "           none\n";
    }
}

std::string pulls_line(const Tally& total) {
    const Pulls pulls = pulls_of(total.echoes.strengths);
    return pulls.count == 0
               ? "nothing to judge"
               : fmt::format("mean {:+.2f}, rms {:.2f} over {} (honest errors: rms 0.8 to 1.2)",
                             pulls.mean, pulls.rms, pulls.count);
}

void add_fractions(const Tally& total, std::string& text) {
    const PixelTally& pixels = total.pixels;
    text += fmt::format("\n  pulls of strength  {}\n", pulls_line(total));
    text += fmt::format(
        "  all pixels         true area {}, flagged {}, marginal {}, unassessed {}\n",
        percent(pixels.true_area, pixels.pixels), percent(pixels.flagged_area, pixels.pixels),
        percent(pixels.marginal, pixels.pixels), percent(pixels.unassessed, pixels.pixels));
    text += fmt::format("  marks              {}, of these {} where no true echo is\n",
                        total.echoes.marks, total.echoes.marks_without_echo);
}

void add_exposures(const NightScore& night, std::string& text) {
    text += fmt::format("\n  {:<24} {:>10} {:>10} {:>10} {:>10}\n", "exposure", "pixels", "echoes",
                        "area ratio", "unassessed");
    for (const ExposureScore& exposure : night.exposures) {
        const PixelTally& pixels = exposure.tally.pixels;
        const double area = ratio_of(pixels.flagged_area, pixels.true_area);
        text += fmt::format(
            "  {:<24} {:>10} {:>10} {:>10} {:>10}{}\n", exposure.exposure,
            percent(pixels.required_flagged, pixels.required),
            percent(echoes_found(exposure.tally.echoes),
                    static_cast<std::int64_t>(exposure.tally.echoes.echoes.size())),
            std::isfinite(area) ? fmt::format("{:.3f}", area) : "-",
            percent(pixels.unassessed, pixels.pixels),
            exposure.tally.detectors_without_mask > 0
                ? fmt::format("  no mask for {} of {} detectors",
                              exposure.tally.detectors_without_mask, exposure.tally.detectors)
                : "");
    }
}

Value figure_json(const Figure& figure) {
    Value::Array offenders(figure.offenders.begin(), figure.offenders.end());
    return Value::Object{{"name", figure.name},
                         {"what", figure.text},
                         {"value", figure.value},
                         {"shown", figure.shown},
                         {"target", figure.target},
                         {"met", figure.met},
                         {"offenders", std::move(offenders)}};
}

Value bins_json(const PixelTally& pixels) {
    Value::Array bins;
    for (std::size_t i = 0; i < pixels.bins.size(); ++i) {
        const ResponseBin& bin = pixels.bins[i];
        bins.push_back(Value::Object{
            {"from", kResponseEdges[i]},
            {"to", i + 1 < kResponseEdges.size() ? Value(kResponseEdges[i + 1]) : Value()},
            {"pixels", bin.pixels},
            {"flagged", bin.flagged},
            {"marginal", bin.marginal},
            {"unassessed", bin.unassessed}});
    }
    return bins;
}

template <typename Reason, std::size_t N>
Value reasons_json(const std::array<std::int64_t, N>& counts) {
    Value::Array reasons;
    for (std::size_t i = 0; i < N; ++i) {
        reasons.push_back(Value::Object{{"reason", std::string(text_of(static_cast<Reason>(i)))},
                                        {"pixels", counts[i]}});
    }
    return reasons;
}

Value slope_json(const Slope& slope) {
    return Value::Object{{"value", slope.value},
                         {"error", slope.error},
                         {"pairs", slope.pairs},
                         {"matches", slope.groups}};
}

Value amplifiers_json(const Tally& tally) {
    Value::Array rows;
    for (const auto& [name, matches] : by_victim(tally.echoes.strengths)) {
        const Slope slope = slope_over_pairs(matches);
        rows.push_back(Value::Object{{"amplifier", name},
                                     {"slope", slope.value},
                                     {"error", slope.error},
                                     {"pairs", slope.pairs}});
    }
    return rows;
}

Value pairs_json(const Tally& tally) {
    Value::Array rows;
    for (const auto& [name, matches] : by_pair(tally.echoes.strengths)) {
        const Slope slope = pair_slope(matches);
        rows.push_back(Value::Object{{"victim", name.first},
                                     {"source", name.second},
                                     {"slope", slope.value},
                                     {"error", slope.error},
                                     {"matches", slope.groups}});
    }
    return rows;
}

Value tally_json(const Tally& tally) {
    const PixelTally& pixels = tally.pixels;
    const EchoTally& echoes = tally.echoes;
    const Pulls pulls = pulls_of(echoes.strengths);
    const auto count = [&echoes](bool RequiredEcho::*member) {
        return static_cast<std::int64_t>(
            std::count_if(echoes.echoes.begin(), echoes.echoes.end(), std::mem_fn(member)));
    };
    return Value::Object{
        {"detectors", tally.detectors},
        {"detectors_without_mask", tally.detectors_without_mask},
        {"pixels", pixels.pixels},
        {"required_pixels", pixels.required},
        {"required_pixels_flagged", pixels.required_flagged},
        {"true_area", pixels.true_area},
        {"flagged_area", pixels.flagged_area},
        {"marginal", pixels.marginal},
        {"unassessed", pixels.unassessed},
        {"by_response", bins_json(pixels)},
        {"missed", reasons_json<MissReason>(pixels.missed)},
        {"falsely_flagged", reasons_json<FalseReason>(pixels.falsely_flagged)},
        {"required_echoes", echoes.echoes.size()},
        {"required_echoes_flagged", count(&RequiredEcho::flagged)},
        {"required_echoes_listed", count(&RequiredEcho::listed)},
        {"required_echoes_found", echoes_found(echoes)},
        {"marks", echoes.marks},
        {"marks_without_echo", echoes.marks_without_echo},
        {"strength", slope_json(slope_over_pairs(echoes.strengths))},
        {"pulls", Value::Object{{"mean", pulls.mean}, {"rms", pulls.rms}, {"count", pulls.count}}}};
}

}  // namespace

NightScore night_score(std::string kind, std::vector<ExposureScore> exposures) {
    NightScore night{std::move(kind), std::move(exposures), {}, {}};
    for (const ExposureScore& exposure : night.exposures) {
        night.total += exposure.tally;
    }
    night.figures = figures_of(night.total);
    return night;
}

bool is_complete(const NightScore& night) {
    return night.total.detectors_without_mask == 0;
}

std::string table_of(const NightScore& night) {
    std::string text;
    add_figures(night, text);
    add_bins(night.total.pixels, text);
    add_reasons<MissReason>(
        night.total.pixels.missed,
        fmt::format("true pixels of response {} or more not flagged, by reason", kRequiredResponse),
        text);
    add_reasons<FalseReason>(night.total.pixels.falsely_flagged,
                             "flagged pixels outside the true area, by reason", text);
    add_fractions(night.total, text);
    add_exposures(night, text);
    text +=
        fmt::format("\n  {}", all_met(night.figures) ? "all figures met" : "NOT all figures met");
    return text;
}

Value json_of(const NightScore& night) {
    Value::Array figures;
    std::transform(night.figures.begin(), night.figures.end(), std::back_inserter(figures),
                   figure_json);
    Value::Array exposures;
    for (const ExposureScore& exposure : night.exposures) {
        exposures.push_back(Value::Object{{"exposure", exposure.exposure},
                                          {"fault", exposure.fault},
                                          {"tally", tally_json(exposure.tally)}});
    }
    return Value::Object{{"kind", night.kind},
                         {"met", all_met(night.figures)},
                         {"complete", is_complete(night)},
                         {"figures", std::move(figures)},
                         {"total", tally_json(night.total)},
                         {"victim_amplifiers", amplifiers_json(night.total)},
                         {"pairs", pairs_json(night.total)},
                         {"exposures", std::move(exposures)}};
}

}  // namespace straymark::score
