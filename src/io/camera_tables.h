#pragma once

#include <string>

#include "camera/camera.h"

/// The tables that a camera file names: one row for each amplifier, one for each pair of amplifiers
/// whose echo comes early or late.

namespace straymark::io {

/// Fills gain, read noise, saturation and full well of every amplifier of `camera` from the CSV at
/// `path`. Throws InputError: a row for an amplifier that is not there, two rows for one, an
/// amplifier without a row, a number outside its range.
void read_amplifier_table(const std::string& path, Camera& camera);

/// Fills the pair offsets. Throws InputError: unknown amplifier, a pair that shares no clock or
/// stands there twice, an offset outside +-10000 ticks.
void read_pair_table(const std::string& path, Camera& camera);

}  // namespace straymark::io
