#include "simulate/characterise.h"

#include <Eigen/Dense>
#include <algorithm>
#include <array>
#include <cmath>
#include <optional>

#include "core/random.h"
#include "simulate/streams.h"

namespace straymark::simulate {
namespace {

// A row of well separated pulses: one of each level, from small to full well.
constexpr int kPulseSpacing = 12;
constexpr int kFirstLag = -1;
constexpr int kLastLag = 3;
constexpr int kLags = kLastLag - kFirstLag + 1;
constexpr int kLevels = 48;

// What the laboratory takes for nothing: a hundredth of the direct echo, or half the usual error.
constexpr double kNoticeableShare = 0.01;
// A departure from the straight line that it would report, as a share of the line.
constexpr double kNoticeableBend = 0.003;
// Width of an even spread over its standard deviation, the square root of 12.
constexpr double kEvenSpread = 3.4641016151377544;
// A pixel that fills to this share of full well counts as full.
constexpr double kNearlyFull = 0.985;

/// The echoes of one source: response[victim][level][tick after the pulse].
struct Responses {
    static constexpr int kTicks = 8;  ///< from kFirstLag on
    std::vector<double> levels_adu;   ///< of the pulses, above the empty field
    std::vector<std::vector<std::array<double, kTicks>>> response;
};

/// Sends pulses through one channel of a clock and records what comes out of all others.
class Bench {
public:
    Bench(const Instrument& instrument, const Coupling& coupling, int clock, double even_e)
        : instrument_(instrument),
          coupling_(coupling),
          clock_(clock),
          group_(instrument.clocks[clock]),
          empty_(static_cast<int>(group_.channels.size()), group_.ticks_in_row),
          with_(empty_),
          slow_(empty_),
          echo_empty_(empty_),
          echo_(empty_) {
        for (int place = 0; place < empty_.channels(); ++place) {
            const Channel& channel = instrument.channels[group_.channels[place]];
            std::fill_n(empty_.of(place) + channel.prescan, channel.ticks,
                        static_cast<float>(even_e / channel.gain_e_per_adu));
        }
        leak_row(instrument_, coupling_, clock_, empty_, slow_, echo_empty_);
    }

    Responses record(int source_place, double highest_adu) {
        const Channel& source = instrument_.channels[group_.channels[source_place]];
        Responses result;
        result.response.resize(group_.channels.size());
        const int pulses_in_row = std::max(1, source.ticks / kPulseSpacing - 1);
        for (int first = 0; first < kLevels; first += pulses_in_row) {
            with_ = empty_;
            const int pulses = std::min(pulses_in_row, kLevels - first);
            for (int i = 0; i < pulses; ++i) {
                const double level = highest_adu * (first + i + 1) / kLevels;
                result.levels_adu.push_back(level);
                with_.of(source_place)[pulse_tick(source, i)] += static_cast<float>(level);
            }
            leak_row(instrument_, coupling_, clock_, with_, slow_, echo_);
            for (int place = 0; place < empty_.channels(); ++place) {
                for (int i = 0; i < pulses; ++i) {
                    result.response[place].push_back(seen(place, pulse_tick(source, i)));
                }
            }
        }
        return result;
    }

private:
    static int pulse_tick(const Channel& source, int pulse) {
        return source.prescan + kPulseSpacing / 2 + pulse * kPulseSpacing;
    }
    [[nodiscard]] std::array<double, Responses::kTicks> seen(int place, int pulse) const {
        std::array<double, Responses::kTicks> values{};
        for (int i = 0; i < Responses::kTicks; ++i) {
            const int tick = pulse + kFirstLag + i;
            values[i] = static_cast<double>(echo_.of(place)[tick]) -
                        static_cast<double>(echo_empty_.of(place)[tick]);
        }
        return values;
    }

    const Instrument& instrument_;
    const Coupling& coupling_;
    int clock_;
    const ClockGroup& group_;
    LevelRow empty_, with_, slow_, echo_empty_, echo_;
};

/// The straight and the bent part of one pair, free of measuring errors.
struct Straight {
    int delay_ticks = 0;
    std::array<double, kLags> lags{};
    [[nodiscard]] double direct() const { return lags[-kFirstLag]; }
};

Straight straight_part(const Responses& responses, int place) {
    const std::array<double, Responses::kTicks>& first = responses.response[place].front();
    const auto largest = std::max_element(
        first.begin(), first.end(), [](double a, double b) { return std::fabs(a) < std::fabs(b); });
    Straight straight;
    if (*largest != 0.0) {
        straight.delay_ticks = static_cast<int>(largest - first.begin()) + kFirstLag;
    }
    for (int i = 0; i < kLags; ++i) {
        const int at = straight.delay_ticks + i;
        if (at >= 0 && at < Responses::kTicks) {
            straight.lags[i] = first[at] / responses.levels_adu.front();
        }
    }
    return straight;
}

struct CubicFit {
    double onset_adu = 0.0;
    Eigen::Vector3d c = Eigen::Vector3d::Zero();  ///< in units of `scale`
    double scale = 1.0;
    double rms = 0.0;
};

/// Least squares of a cubic without constant above a given onset, in `extra` against `levels`.
CubicFit fit_above(double onset, double highest, const std::vector<double>& levels,
                   const std::vector<double>& extra) {
    CubicFit fit;
    fit.onset_adu = onset;
    fit.scale = highest - onset;
    const auto powers = [&](double level) {
        const double x = std::max(0.0, (level - onset) / fit.scale);
        return Eigen::Vector3d(x, x * x, x * x * x);
    };
    Eigen::Matrix3d normal = Eigen::Matrix3d::Zero();
    Eigen::Vector3d right = Eigen::Vector3d::Zero();
    for (std::size_t i = 0; i < levels.size(); ++i) {
        const Eigen::Vector3d p = powers(levels[i]);
        normal += p * p.transpose();
        right += extra[i] * p;
    }
    fit.c = normal.ldlt().solve(right);
    double sum = 0.0;
    for (std::size_t i = 0; i < levels.size(); ++i) {
        sum += std::pow(extra[i] - fit.c.dot(powers(levels[i])), 2.0);
    }
    fit.rms = std::sqrt(sum / static_cast<double>(levels.size()));
    return fit;
}

/// The bend of one pair over the levels that the converter can show; nothing where the echo stays
/// straight.
std::optional<Bend> bent_part(const Responses& responses, int place, const Straight& straight,
                              double highest_shown_adu) {
    std::vector<double> levels;
    std::vector<double> extra;
    double largest = 0.0;
    for (std::size_t i = 0; i < responses.levels_adu.size(); ++i) {
        const double level = responses.levels_adu[i];
        if (level <= highest_shown_adu) {
            const double direct = responses.response[place][i][straight.delay_ticks - kFirstLag];
            levels.push_back(level);
            extra.push_back(direct - straight.direct() * level);
            largest = std::max(largest, std::fabs(extra.back()));
        }
    }
    if (largest <= kNoticeableBend * std::fabs(straight.direct()) * highest_shown_adu) {
        return std::nullopt;
    }
    CubicFit best;
    best.rms = HUGE_VAL;
    for (std::size_t i = 0; i + 6 < levels.size(); ++i) {
        for (const double between : {0.0, 0.25, 0.5, 0.75}) {
            const double onset = levels[i] + between * (levels[i + 1] - levels[i]);
            const CubicFit fit = fit_above(onset, levels.back(), levels, extra);
            if (fit.rms < best.rms) {
                best = fit;
            }
        }
    }
    Bend bend;
    bend.onset_adu = best.onset_adu;
    bend.c1 = best.c[0] / best.scale;
    bend.c2 = best.c[1] / (best.scale * best.scale);
    bend.c3 = best.c[2] / (best.scale * best.scale * best.scale);
    bend.relative_error = best.rms / largest;
    return bend;
}

/// Adds the errors of a measurement.
class Observer {
public:
    Observer(const Scenario& scenario, int source, int victim)
        : plan_(scenario.characterisation),
          stream_(scenario.seed, stream_of(Purpose::product, source, victim)) {}

    Measured measure(double truth) {
        const double error = std::max(plan_.error_floor, plan_.relative_error * std::fabs(truth));
        return {truth + error * stream_.normal(), error};
    }
    Bend measure(Bend bend) {
        bend.relative_error = std::max(bend.relative_error, plan_.relative_error);
        const double factor = 1.0 + plan_.relative_error * stream_.normal();
        bend.c1 *= factor;
        bend.c2 *= factor;
        bend.c3 *= factor;
        return bend;
    }
    [[nodiscard]] double noticeable(double direct) const {
        return std::max(0.5 * plan_.error_floor, kNoticeableShare * std::fabs(direct));
    }

private:
    const CharacterisationPlan& plan_;
    RandomStream stream_;
};

/// What a full pixel of a channel reads, and the level it really puts out, above the empty field.
struct FullReading {
    double shown_adu = 0.0;
    double true_adu = 0.0;
    [[nodiscard]] bool clipped() const { return true_adu > shown_adu * (1.0 + 1e-6); }
};

FullReading full_reading(const Scenario& scenario, const Instrument& instrument, int channel,
                         double even_e) {
    const Channel& what = instrument.channels[channel];
    const double full_adu =
        (instrument.chips[what.detector].full_well_e - even_e) / what.gain_e_per_adu;
    const double room_adu =
        scenario.amplifiers.converter_max_adu - what.bias_adu - even_e / what.gain_e_per_adu;
    return {std::min(full_adu, room_adu), full_adu};
}

/// The echo at the pair's delay of the pulse nearest to a level.
double echo_at(const Responses& responses, int place, const Straight& straight, double level_adu) {
    const std::vector<double>& levels = responses.levels_adu;
    const auto nearest = std::min_element(levels.begin(), levels.end(), [&](double a, double b) {
        return std::fabs(a - level_adu) < std::fabs(b - level_adu);
    });
    return responses.response[place][nearest - levels.begin()][straight.delay_ticks - kFirstLag];
}

PairMeasurement measure_pair(const Responses& responses, int place, const FullReading& full,
                             Observer observer) {
    const Straight straight = straight_part(responses, place);
    PairMeasurement pair;
    pair.delay_ticks = straight.delay_ticks;
    pair.coefficient = observer.measure(straight.direct());
    for (int i = 0; i < kLags; ++i) {
        const int lag = kFirstLag + i;
        if (lag != 0 && std::fabs(straight.lags[i]) > observer.noticeable(straight.direct())) {
            pair.lags.push_back({lag, observer.measure(straight.lags[i])});
        }
    }
    std::optional<Bend> bend = bent_part(responses, place, straight, full.shown_adu);
    if (!bend && full.clipped() && straight.direct() != 0.0) {
        bend = Bend{};
        bend->onset_adu = full.shown_adu;
    }
    if (bend) {
        bend = observer.measure(*bend);
        const double at_full = echo_at(responses, place, straight, full.true_adu);
        bend->clipped = observer.measure(at_full / full.shown_adu);
        // A clipped pixel may hold anything from just clipped to full: an even spread.
        const double just_clipped = echo_at(responses, place, straight, full.shown_adu);
        bend->clipped.error = std::hypot(bend->clipped.error,
                                         (at_full - just_clipped) / full.shown_adu / kEvenSpread);
        pair.bend = bend;
    }
    return pair;
}

/// Mean and spread of what is true of each stratum, from the direct parts of its pairs.
class StratumSums {
public:
    void add(double value) {
        ++count_;
        sum_ += value;
        squares_ += value * value;
    }
    [[nodiscard]] StratumSpread spread(Stratum stratum) const {
        const double mean = count_ > 0 ? sum_ / count_ : 0.0;
        const double variance = count_ > 0 ? squares_ / count_ - mean * mean : 0.0;
        return {stratum, mean, std::sqrt(std::max(0.0, variance))};
    }

private:
    int count_ = 0;
    double sum_ = 0.0, squares_ = 0.0;
};

}  // namespace

double saturation_adu(const Scenario& scenario, const Instrument& instrument, int channel) {
    const Channel& what = instrument.channels[channel];
    const double full = what.bias_adu + kNearlyFull * instrument.chips[what.detector].full_well_e /
                                            what.gain_e_per_adu;
    return std::min(static_cast<double>(scenario.amplifiers.converter_max_adu), std::floor(full));
}

Characterisation characterise(const Scenario& scenario, const Instrument& instrument,
                              const Coupling& coupling, double even_e) {
    Characterisation result;
    std::array<StratumSums, 3> strata;
    for (int clock = 0; clock < static_cast<int>(instrument.clocks.size()); ++clock) {
        const ClockGroup& group = instrument.clocks[clock];
        Bench bench(instrument, coupling, clock, even_e);
        for (int s = 0; s < static_cast<int>(group.channels.size()); ++s) {
            const int source = group.channels[s];
            const FullReading full = full_reading(scenario, instrument, source, even_e);
            const Responses responses = bench.record(s, full.true_adu);
            for (int v = 0; v < static_cast<int>(group.channels.size()); ++v) {
                if (v == s) {
                    continue;
                }
                const int victim = group.channels[v];
                PairMeasurement pair =
                    measure_pair(responses, v, full, Observer(scenario, source, victim));
                pair.source = source;
                pair.victim = victim;
                strata[static_cast<std::size_t>(stratum_of(instrument, source, victim))].add(
                    straight_part(responses, v).direct());
                result.pairs.push_back(std::move(pair));
            }
        }
    }
    std::sort(result.pairs.begin(), result.pairs.end(),
              [](const PairMeasurement& a, const PairMeasurement& b) {
                  return std::pair(a.victim, a.source) < std::pair(b.victim, b.source);
              });
    for (const Stratum stratum : {Stratum::device, Stratum::board, Stratum::rest}) {
        result.strata.push_back(strata[static_cast<std::size_t>(stratum)].spread(stratum));
    }
    return result;
}

}  // namespace straymark::simulate
