#include "simulate/truth.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <numeric>

#include "core/parallel.h"
#include "simulate/blobs.h"
#include "simulate/passage.h"

namespace straymark::simulate {
namespace {

// An empty field has one pixel in three million above this many times its noise.
constexpr double kFarOut = 5.0;

/// Values smoothed along one direction by the binomial weights 1 4 6 4 1, zero beyond the ends.
/// Index line * line_step + place * place_step.
std::vector<double> smoothed(const std::vector<double>& values, int lines, int line_step,
                             int places, int place_step) {
    constexpr std::array<double, 5> kWeights{1.0 / 16, 4.0 / 16, 6.0 / 16, 4.0 / 16, 1.0 / 16};
    std::vector<double> result(values.size(), 0.0);
    for (int line = 0; line < lines; ++line) {
        for (int place = 0; place < places; ++place) {
            for (int k = -2; k <= 2; ++k) {
                if (place + k >= 0 && place + k < places) {
                    result[line * line_step + place * place_step] +=
                        kWeights[k + 2] * values[line * line_step + (place + k) * place_step];
                }
            }
        }
    }
    return result;
}

/// Index of the value of largest magnitude. Precondition: not empty.
std::size_t index_of_largest(const std::vector<double>& values) {
    return static_cast<std::size_t>(
        std::max_element(values.begin(), values.end(),
                         [](double a, double b) { return std::fabs(a) < std::fabs(b); }) -
        values.begin());
}

/// Sum and peak of an echo, and the place of its crest: the peak once smoothed over a few pixels,
/// so that neither noise nor a flat top decides.
Echo described(const Instrument& instrument, const Leak& leak, const EchoPatch& patch) {
    Echo echo;
    echo.source = leak.source;
    echo.victim = leak.victim;
    if (patch.added_e.empty()) {
        return echo;
    }
    echo.total_e = std::accumulate(patch.added_e.begin(), patch.added_e.end(), 0.0);
    echo.peak_e = patch.added_e[index_of_largest(patch.added_e)];
    const std::vector<double> along =
        smoothed(patch.added_e, patch.rows, patch.ticks, patch.ticks, 1);
    const auto crest = static_cast<int>(
        index_of_largest(smoothed(along, patch.ticks, 1, patch.rows, patch.ticks)));
    const Channel& victim = instrument.channels[leak.victim];
    const int width = instrument.chips[victim.detector].width;
    const auto pixel = static_cast<int>(victim.pixel(patch.first_tick + crest % patch.ticks,
                                                     patch.first_row + crest / patch.ticks));
    echo.crest_x = pixel % width;
    echo.crest_y = pixel / width;
    return echo;
}

Vec2 centroid(const Chip& chip, const Channel& channel, const Blob& blob) {
    double sum = 0.0;
    Vec2 moment;
    for (const ClockedPixel& pixel : blob) {
        const auto index = static_cast<int>(channel.pixel(pixel.tick, pixel.row));
        const int x = index % chip.width;
        const int y = index / chip.width;
        const auto charge_e = static_cast<double>(pixel.charge_e);
        moment = moment + charge_e * Vec2{static_cast<double>(x), static_cast<double>(y)};
        sum += charge_e;
    }
    return (1.0 / sum) * moment;
}

/// The leaks out of each channel.
std::vector<std::vector<Leak>> leaks_by_source(const Instrument& instrument,
                                               const Coupling& coupling) {
    std::vector<std::vector<Leak>> result(instrument.channels.size());
    for (const std::vector<Leak>& leaks : coupling.by_clock) {
        for (const Leak& leak : leaks) {
            result[leak.source].push_back(leak);
        }
    }
    return result;
}

/// The charge of a source pixel that could cast an echo of `least_e` through a leak.
double enough_charge(const Instrument& instrument, const Leak& leak, double least_e) {
    return least_e * instrument.channels[leak.source].gain_e_per_adu /
           (instrument.channels[leak.victim].gain_e_per_adu * static_cast<double>(leak.bound()));
}

float largest_charge(const Blob& blob) {
    return std::max_element(blob.begin(), blob.end(),
                            [](const auto& a, const auto& b) { return a.charge_e < b.charge_e; })
        ->charge_e;
}

/// The echoes of one channel's blobs whose peak exceeds `least_e` of the victim.
std::vector<Echo> echoes_of_source(const Instrument& instrument, float tail_decay, int source,
                                   const std::vector<Leak>& leaks, const std::vector<Image>& excess,
                                   double even_e, const std::vector<double>& least_e) {
    std::vector<Echo> echoes;
    if (leaks.empty()) {
        return echoes;
    }
    const Channel& channel = instrument.channels[source];
    std::vector<double> enough_e;
    enough_e.reserve(leaks.size());
    for (const Leak& leak : leaks) {
        enough_e.push_back(enough_charge(instrument, leak, least_e[leak.victim]));
    }
    const auto faintest_e = static_cast<float>(*std::min_element(enough_e.begin(), enough_e.end()));
    for (const Blob& blob : find_blobs(channel, excess[channel.detector], faintest_e)) {
        const Passage passage(channel, tail_decay, blob, even_e);
        const Vec2 place = centroid(instrument.chips[channel.detector], channel, blob);
        const auto brightest_e = static_cast<double>(largest_charge(blob));
        for (std::size_t i = 0; i < leaks.size(); ++i) {
            if (brightest_e < enough_e[i]) {
                continue;
            }
            const Channel& victim = instrument.channels[leaks[i].victim];
            Echo echo = described(instrument, leaks[i], passage.echo(victim, leaks[i]));
            if (std::fabs(echo.peak_e) > least_e[echo.victim]) {
                echo.source_pixel = place;
                echoes.push_back(echo);
            }
        }
    }
    return echoes;
}

}  // namespace

void excess_charge(double even_e, const Image& light, Image& charge) {
    const auto even = static_cast<float>(even_e);
    const auto far_out = static_cast<float>(kFarOut * std::sqrt(even_e));
    for (std::size_t i = 0; i < charge.size(); ++i) {
        const float excess = charge[i] - even;
        charge[i] = excess > far_out ? excess : light[i];
    }
}

TruthRow::TruthRow(const Instrument& instrument, const Coupling& coupling, int clock, double even_e)
    : instrument_(instrument),
      coupling_(coupling),
      clock_(clock),
      with_(static_cast<int>(instrument.clocks[clock].channels.size()),
            instrument.clocks[clock].ticks_in_row),
      empty_(with_),
      slow_(with_),
      echo_with_(with_),
      echo_empty_(with_) {
    const ClockGroup& group = instrument.clocks[clock];
    for (int place = 0; place < with_.channels(); ++place) {
        set_empty_field(instrument.channels[group.channels[place]], even_e, empty_.of(place));
    }
    leak_row(instrument, coupling, clock, empty_, slow_, echo_empty_);
}

void TruthRow::add(const std::vector<Image>& excess, int row, std::vector<Image>& added) {
    const ClockGroup& group = instrument_.clocks[clock_];
    video_row(instrument_, group, excess, row, with_);
    for (int place = 0; place < with_.channels(); ++place) {
        const float* empty = empty_.of(place);
        float* with = with_.of(place);
        for (int t = 0; t < with_.ticks(); ++t) {
            with[t] += empty[t];
        }
    }
    leak_row(instrument_, coupling_, clock_, with_, slow_, echo_with_);
    for (int place = 0; place < with_.channels(); ++place) {
        const Channel& victim = instrument_.channels[group.channels[place]];
        const float* with = echo_with_.of(place) + victim.prescan;
        const float* empty = echo_empty_.of(place) + victim.prescan;
        float* out = added[victim.detector].data() + victim.pixel(0, row);
        const auto gain = static_cast<float>(victim.gain_e_per_adu);
        for (int tick = 0; tick < victim.ticks; ++tick) {
            out[tick * victim.tick_step] += gain * (with[tick] - empty[tick]);
        }
    }
}

std::vector<Echo> list_echoes(const Instrument& instrument, const Coupling& coupling,
                              const std::vector<Image>& excess, double even_e,
                              const std::vector<double>& noise_e, double least_noise, int threads) {
    std::vector<double> least_e;
    least_e.reserve(noise_e.size());
    for (const double noise : noise_e) {
        least_e.push_back(least_noise * noise);
    }
    const std::vector<std::vector<Leak>> leaks = leaks_by_source(instrument, coupling);
    std::vector<std::vector<Echo>> found(instrument.channels.size());
    parallel_for(static_cast<int>(found.size()), threads, [&](int source) {
        found[source] = echoes_of_source(instrument, coupling.tail_decay, source, leaks[source],
                                         excess, even_e, least_e);
    });
    std::vector<Echo> echoes;
    for (const std::vector<Echo>& some : found) {
        echoes.insert(echoes.end(), some.begin(), some.end());
    }
    return echoes;
}

}  // namespace straymark::simulate
