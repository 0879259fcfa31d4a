#include "simulate/truth.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "core/parallel.h"
#include "simulate/blobs.h"

namespace straymark::simulate {
namespace {

// An empty field has one pixel in three million above this many times its noise.
constexpr double kFarOut = 5.0;

/// The level of a channel whose data pixels all hold the same charge.
void empty_row(const Channel& channel, double even_e, float* level) {
    std::fill(level + channel.prescan, level + channel.prescan + channel.ticks,
              static_cast<float>(even_e / channel.gain_e_per_adu));
}

/// The levels of a source channel while one blob passes, and what they would be without it.
class Passage {
public:
    Passage(const Channel& channel, float tail_decay, const Blob& blob, double even_e)
        : first_row_(blob.front().row),
          rows_(blob.back().row - blob.front().row + 1),
          with_(rows_, channel.ticks_in_row()),
          slow_with_(rows_, channel.ticks_in_row()),
          empty_(1, channel.ticks_in_row()),
          slow_empty_(1, channel.ticks_in_row()) {
        empty_row(channel, even_e, empty_.of(0));
        settle(tail_decay, empty_.of(0), empty_.ticks(), slow_empty_.of(0));
        for (int r = 0; r < rows_; ++r) {
            empty_row(channel, even_e, with_.of(r));
        }
        int last_tick = 0;
        first_tick_ = std::numeric_limits<int>::max();
        for (const ClockedPixel& pixel : blob) {
            const int tick = channel.prescan + pixel.tick;
            with_.of(pixel.row - first_row_)[tick] +=
                static_cast<float>(static_cast<double>(pixel.charge_e) / channel.gain_e_per_adu);
            first_tick_ = std::min(first_tick_, tick);
            last_tick = std::max(last_tick, tick);
        }
        end_tick_ = std::min(last_tick + 1 + LevelRow::kMargin, with_.ticks());
        for (int r = 0; r < rows_; ++r) {
            settle(tail_decay, with_.of(r), with_.ticks(), slow_with_.of(r));
        }
    }

    /// The echo in a victim: of largest magnitude, where, and in sum.
    [[nodiscard]] Echo echo(const Instrument& instrument, const Leak& leak) const {
        const Channel& victim = instrument.channels[leak.victim];
        const int begin = std::max(first_tick_, victim.prescan);
        const int end = std::min(end_tick_, victim.prescan + victim.ticks);
        Echo result;
        result.source = leak.source;
        result.victim = leak.victim;
        LevelRow echoes(2, with_.ticks());
        const float* without = echoes.of(1);
        add_leak(leak, empty_.of(0), slow_empty_.of(0), begin, end, echoes.of(1));
        for (int r = 0; r < rows_; ++r) {
            float* with = echoes.of(0);
            std::fill(with, with + with_.ticks(), 0.0F);
            add_leak(leak, with_.of(r), slow_with_.of(r), begin, end, with);
            for (int t = begin; t < end; ++t) {
                const double added = victim.gain_e_per_adu * (static_cast<double>(with[t]) -
                                                              static_cast<double>(without[t]));
                result.total_e += added;
                if (std::fabs(added) > std::fabs(result.peak_e)) {
                    result.peak_e = added;
                    set_peak(instrument, victim, t - victim.prescan, first_row_ + r, result);
                }
            }
        }
        return result;
    }

private:
    static void set_peak(const Instrument& instrument, const Channel& victim, int tick, int row,
                         Echo& echo) {
        const int width = instrument.chips[victim.detector].width;
        const auto pixel = static_cast<int>(victim.pixel(tick, row));
        echo.peak_x = pixel % width;
        echo.peak_y = pixel / width;
    }

    int first_row_, rows_;
    int first_tick_ = 0, end_tick_ = 0;
    LevelRow with_, slow_with_, empty_, slow_empty_;
};

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
            Echo echo = passage.echo(instrument, leaks[i]);
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
        empty_row(instrument.channels[group.channels[place]], even_e, empty_.of(place));
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
