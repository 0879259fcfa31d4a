#include "simulate/passage.h"

#include <algorithm>
#include <limits>

namespace straymark::simulate {

void set_empty_field(const Channel& channel, double even_e, float* level) {
    std::fill(level + channel.prescan, level + channel.prescan + channel.ticks,
              static_cast<float>(even_e / channel.gain_e_per_adu));
}

Passage::Passage(const Channel& channel, float tail_decay, const Blob& blob, double even_e)
    : first_row_(blob.front().row),
      rows_(blob.back().row - blob.front().row + 1),
      with_(rows_, channel.ticks_in_row()),
      slow_with_(rows_, channel.ticks_in_row()),
      empty_(1, channel.ticks_in_row()),
      slow_empty_(1, channel.ticks_in_row()) {
    set_empty_field(channel, even_e, empty_.of(0));
    settle(tail_decay, empty_.of(0), empty_.ticks(), slow_empty_.of(0));
    for (int r = 0; r < rows_; ++r) {
        set_empty_field(channel, even_e, with_.of(r));
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

EchoPatch Passage::echo(const Channel& victim, const Leak& leak) const {
    const int begin = std::max(first_tick_, victim.prescan);
    const int end = std::max(begin, std::min(end_tick_, victim.prescan + victim.ticks));
    EchoPatch patch{first_row_, begin - victim.prescan, rows_, end - begin, {}};
    patch.added_e.reserve(static_cast<std::size_t>(rows_) * patch.ticks);
    LevelRow echoes(2, with_.ticks());
    float* with = echoes.of(0);
    float* without = echoes.of(1);
    add_leak(leak, empty_.of(0), slow_empty_.of(0), begin, end, without);
    for (int r = 0; r < rows_; ++r) {
        std::fill(with, with + with_.ticks(), 0.0F);
        add_leak(leak, with_.of(r), slow_with_.of(r), begin, end, with);
        for (int t = begin; t < end; ++t) {
            patch.added_e.push_back(victim.gain_e_per_adu * (static_cast<double>(with[t]) -
                                                             static_cast<double>(without[t])));
        }
    }
    return patch;
}

}  // namespace straymark::simulate
