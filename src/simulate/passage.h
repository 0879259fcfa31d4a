#pragma once

#include <vector>

#include "simulate/blobs.h"
#include "simulate/coupling.h"
#include "simulate/instrument.h"

namespace straymark::simulate {

/// What one blob adds to the data pixels of one victim channel: electrons, in clock order, index
/// row * ticks + tick. May be empty: the echo falls into prescan or overscan.
struct EchoPatch {
    int first_row = 0;
    int first_tick = 0;  ///< without the victim's prescan
    int rows = 0;
    int ticks = 0;
    std::vector<double> added_e;
};

/// Sets the data ticks of a row to the level of an empty field.
void set_empty_field(const Channel& channel, double even_e, float* level);

/// The levels of a source channel while one blob passes, and what they would be without it.
class Passage {
public:
    Passage(const Channel& channel, float tail_decay, const Blob& blob, double even_e);

    /// What the blob adds to the leak's victim.
    [[nodiscard]] EchoPatch echo(const Channel& victim, const Leak& leak) const;

private:
    int first_row_, rows_;
    int first_tick_ = 0, end_tick_ = 0;
    LevelRow with_, slow_with_;    ///< one "channel" for each row of the blob
    LevelRow empty_, slow_empty_;  ///< the same for all rows
};

}  // namespace straymark::simulate
