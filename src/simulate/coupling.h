#pragma once

#include <vector>

#include "simulate/instrument.h"

namespace straymark::simulate {

/// What all amplifiers of one clock put out during one row, tick by tick: an analog level in units
/// of the converter (ADU, not rounded, not clipped). Around each channel's ticks lies a margin of
/// silence, so that a delayed signal can be looked up at any tick.
class LevelRow {
public:
    static constexpr int kMargin = 8;

    LevelRow(int channels, int ticks)
        : ticks_(ticks),
          stride_(ticks + 2 * kMargin),
          levels_(static_cast<std::size_t>(channels) * stride_, 0.0F) {}

    /// Tick 0 of a channel; valid from -kMargin to ticks + kMargin - 1.
    [[nodiscard]] float* of(int channel) {
        return levels_.data() + static_cast<std::ptrdiff_t>(channel) * stride_ + kMargin;
    }
    [[nodiscard]] const float* of(int channel) const {
        return levels_.data() + static_cast<std::ptrdiff_t>(channel) * stride_ + kMargin;
    }
    [[nodiscard]] int ticks() const { return ticks_; }
    [[nodiscard]] int channels() const { return static_cast<int>(levels_.size()) / stride_; }
    void silence() { levels_.assign(levels_.size(), 0.0F); }

private:
    int ticks_, stride_;
    std::vector<float> levels_;
};

/// How the level of one channel leaks into another, tick by tick: a resistive part that follows the
/// level, a capacitive part that follows its change since the tick before, a slow part that has yet
/// to settle, and a bending part above an onset; all of it whole ticks later.
struct Leak {
    int source = 0;  ///< channels of the instrument
    int victim = 0;
    int delay_ticks = 0;
    float resistive = 0.0F;
    float capacitive = 0.0F;
    float slow = 0.0F;
    float bending = 0.0F;  ///< slope that the bending part tends to
    float onset_adu = 0.0F;
    float width_adu = 1.0F;  ///< over which it turns

    /// No echo is larger than this times the source's largest level.
    [[nodiscard]] float bound() const;
};

/// The level as a slow amplifier follows it: towards the level of the tick before, a share
/// 1 - decay of the way in each tick; so it never exceeds the largest level.
/// `level` and `slow`: valid over the margins.
void settle(float decay, const float* level, int ticks, float* slow);

/// Adds to ticks [begin, end) of the victim what leaks there. `source`, `slow`: tick 0 of the
/// source's level and of its slow part.
void add_leak(const Leak& leak, const float* source, const float* slow, int begin, int end,
              float* victim);

/// All leaks of the camera, as the seed drew them.
struct Coupling {
    std::vector<std::vector<Leak>> by_clock;  ///< ordered by victim, then source; no zero leaks
    float tail_decay = 0.0F;
};

Coupling draw_coupling(const Scenario& scenario, const Instrument& instrument);

/// The group to which a pair of amplifiers belongs.
enum class Stratum { device, board, rest };
Stratum stratum_of(const Instrument& instrument, int source, int victim);

/// Sets `echo` to what leaks into every channel of one clock during one row. `slow`: work space of
/// the same shape. Channels are numbered by
/// Channel::place.
void leak_row(const Instrument& instrument, const Coupling& coupling, int clock,
              const LevelRow& level, LevelRow& slow, LevelRow& echo);

}  // namespace straymark::simulate
