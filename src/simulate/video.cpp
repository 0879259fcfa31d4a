#include "simulate/video.h"

#include <algorithm>
#include <cmath>

#include "core/random.h"
#include "simulate/streams.h"

namespace straymark::simulate {

void video_row(const Instrument& instrument, const ClockGroup& group,
               const std::vector<Image>& images, int row, LevelRow& level) {
    for (int place = 0; place < static_cast<int>(group.channels.size()); ++place) {
        const Channel& channel = instrument.channels[group.channels[place]];
        const float* charge = images[channel.detector].data() + channel.pixel(0, row);
        const auto per_e = static_cast<float>(1.0 / channel.gain_e_per_adu);
        float* out = level.of(place);
        std::fill(out, out + channel.prescan, 0.0F);
        for (int tick = 0; tick < channel.ticks; ++tick) {
            out[channel.prescan + tick] = per_e * charge[tick * channel.tick_step];
        }
        std::fill(out + channel.prescan + channel.ticks, out + channel.ticks_in_row(), 0.0F);
    }
}

BiasLevel::BiasLevel(const Scenario& scenario, const Instrument& instrument, int exposure,
                     int channel)
    : level_adu_(instrument.channels[channel].bias_adu) {
    RandomStream stream(scenario.seed, stream_of(Purpose::bias, exposure, channel));
    const double amplitude = scenario.amplifiers.bias_drift_adu;
    const int rows = instrument.channels[channel].rows;
    drift_adu_ = amplitude * stream.uniform();
    phase_ = stream.uniform();
    slope_adu_per_row_ = amplitude * (2.0 * stream.uniform() - 1.0) / rows;
    turns_per_row_ = (0.5 + stream.uniform()) / rows;
}

double BiasLevel::at(int row) const {
    return level_adu_ + slope_adu_per_row_ * row +
           drift_adu_ * std::sin(2.0 * std::numbers::pi * (phase_ + turns_per_row_ * row));
}

void digitise_row(const Scenario& scenario, const Instrument& instrument, int exposure, int channel,
                  int row, double bias_adu, const float* level, const float* echo,
                  std::uint16_t* out) {
    const Channel& what = instrument.channels[channel];
    RandomStream stream(scenario.seed, stream_of(Purpose::read_noise, exposure, channel, row));
    const double noise_adu = what.read_noise_e / what.gain_e_per_adu;
    const double largest = scenario.amplifiers.converter_max_adu;
    for (int t = 0; t < what.ticks_in_row(); ++t) {
        const double analog = bias_adu + static_cast<double>(level[t]) +
                              static_cast<double>(echo[t]) + noise_adu * stream.normal();
        out[t] = static_cast<std::uint16_t>(std::clamp(std::nearbyint(analog), 0.0, largest));
    }
}

}  // namespace straymark::simulate
