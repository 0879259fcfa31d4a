#include "simulate/coupling.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstdlib>

#include "core/random.h"
#include "simulate/streams.h"

namespace straymark::simulate {
namespace {

double drawn(RandomStream& stream, Range range) {
    return range.low + (range.high - range.low) * stream.uniform();
}

double drawn_in_logarithm(RandomStream& stream, Range range) {
    return range.low * std::pow(range.high / range.low, stream.uniform());
}

const StratumPlan& plan_of(const CouplingPlan& plan, Stratum stratum) {
    switch (stratum) {
        case Stratum::device:
            return plan.device;
        case Stratum::board:
            return plan.board;
        case Stratum::rest:
            break;
    }
    return plan.rest;
}

/// How far apart two channels of one device lie; 1 elsewhere.
int channel_distance(const Instrument& instrument, int source, int victim) {
    const Channel& a = instrument.channels[source];
    const Channel& b = instrument.channels[victim];
    return a.detector == b.detector ? std::abs(a.number - b.number) : 1;
}

Leak draw_leak(const Scenario& scenario, const Instrument& instrument, int source, int victim) {
    const CouplingPlan& plan = scenario.coupling;
    const StratumPlan& stratum = plan_of(plan, stratum_of(instrument, source, victim));
    RandomStream stream(scenario.seed, stream_of(Purpose::coupling, source, victim));
    Leak leak;
    leak.source = source;
    leak.victim = victim;
    if (stream.uniform() < stratum.zero_fraction) {
        return leak;
    }
    const double distance = channel_distance(instrument, source, victim);
    const double sign = stream.uniform() < stratum.negative_fraction ? -1.0 : 1.0;
    const double direct = sign * drawn_in_logarithm(stream, stratum.strength) *
                          std::pow(stratum.fall_per_channel, distance - 1.0);
    leak.resistive = static_cast<float>(direct);
    if (stream.uniform() < plan.derivative_fraction) {
        leak.capacitive = static_cast<float>(direct * drawn(stream, plan.derivative_ratio));
    }
    if (stream.uniform() < plan.tail_fraction) {
        leak.slow = static_cast<float>(direct * drawn(stream, plan.tail_ratio));
    }
    if (stream.uniform() < plan.delayed_fraction) {
        leak.delay_ticks =
            1 + static_cast<int>(stream.uniform() * static_cast<double>(plan.longest_delay_ticks));
    }
    if (stream.uniform() < plan.bent_fraction) {
        leak.bending = static_cast<float>(direct * drawn(stream, plan.bend_ratio));
        leak.onset_adu = static_cast<float>(drawn(stream, plan.bend_onset_adu));
        leak.width_adu = static_cast<float>(plan.bend_width_adu);
    }
    return leak;
}

}  // namespace

float Leak::bound() const {
    // The capacitive part follows a change, which is no larger than the largest level.
    return std::fabs(resistive) + std::fabs(capacitive) + std::fabs(slow) + std::fabs(bending);
}

void settle(float decay, const float* level, int ticks, float* slow) {
    slow[-LevelRow::kMargin] = 0.0F;
    for (int t = 1 - LevelRow::kMargin; t < ticks + LevelRow::kMargin; ++t) {
        slow[t] = (1.0F - decay) * level[t - 1] + decay * slow[t - 1];
    }
}

void add_leak(const Leak& leak, const float* source, const float* slow, int begin, int end,
              float* victim) {
    const float* from = source - leak.delay_ticks;
    const float* settling = slow - leak.delay_ticks;
    for (int t = begin; t < end; ++t) {
        victim[t] += leak.resistive * from[t];
    }
    if (leak.capacitive != 0.0F) {
        for (int t = begin; t < end; ++t) {
            victim[t] += leak.capacitive * (from[t] - from[t - 1]);
        }
    }
    if (leak.slow != 0.0F) {
        for (int t = begin; t < end; ++t) {
            victim[t] += leak.slow * settling[t];
        }
    }
    if (leak.bending != 0.0F) {
        for (int t = begin; t < end; ++t) {
            const float above = from[t] - leak.onset_adu;
            if (above > 0.0F) {
                victim[t] += leak.bending * (std::hypot(above, leak.width_adu) - leak.width_adu);
            }
        }
    }
}

Stratum stratum_of(const Instrument& instrument, int source, int victim) {
    const int a = instrument.channels[source].detector;
    const int b = instrument.channels[victim].detector;
    if (a == b) {
        return Stratum::device;
    }
    return instrument.chips[a].board == instrument.chips[b].board ? Stratum::board : Stratum::rest;
}

Coupling draw_coupling(const Scenario& scenario, const Instrument& instrument) {
    Coupling coupling;
    coupling.tail_decay = static_cast<float>(scenario.coupling.tail_decay);
    for (const ClockGroup& clock : instrument.clocks) {
        std::vector<Leak>& leaks = coupling.by_clock.emplace_back();
        for (const int victim : clock.channels) {
            for (const int source : clock.channels) {
                if (source == victim) {
                    continue;
                }
                const Leak leak = draw_leak(scenario, instrument, source, victim);
                assert(leak.delay_ticks + 1 < LevelRow::kMargin);
                if (leak.bound() > 0.0F) {
                    leaks.push_back(leak);
                }
            }
        }
    }
    return coupling;
}

void leak_row(const Instrument& instrument, const Coupling& coupling, int clock,
              const LevelRow& level, LevelRow& slow, LevelRow& echo) {
    for (int place = 0; place < level.channels(); ++place) {
        settle(coupling.tail_decay, level.of(place), level.ticks(), slow.of(place));
    }
    echo.silence();
    for (const Leak& leak : coupling.by_clock[clock]) {
        const int source = instrument.channels[leak.source].place;
        const int victim = instrument.channels[leak.victim].place;
        add_leak(leak, level.of(source), slow.of(source), 0, level.ticks(), echo.of(victim));
    }
}

}  // namespace straymark::simulate
