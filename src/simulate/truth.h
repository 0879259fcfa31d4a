#pragma once

#include <vector>

#include "simulate/coupling.h"
#include "simulate/instrument.h"
#include "simulate/video.h"

/// What the leaks added to an exposure: the echo with the light of stars minus the echo without,
/// from the levels that the channels put out.

namespace straymark::simulate {

/// The charge that is there because of stars and particles, in place of `charge`: where it stands
/// far out of the empty field's noise, charge minus `even_e`; elsewhere the light expected there.
/// So the noise of the empty sky, which leaks too, is no part of the truth.
void excess_charge(double even_e, const Image& light, Image& charge);

/// Adds to `added` (an image for each detector, electrons of the victim) what leaks during one row.
/// `excess`: by detector. `even_e`: the empty field.
class TruthRow {
public:
    TruthRow(const Instrument& instrument, const Coupling& coupling, int clock, double even_e);
    void add(const std::vector<Image>& excess, int row, std::vector<Image>& added);

private:
    const Instrument& instrument_;
    const Coupling& coupling_;
    int clock_;
    LevelRow with_, empty_, slow_, echo_with_, echo_empty_;
};

/// The echo of one bright blob of one source channel in one victim channel.
struct Echo {
    int source = 0;  ///< channels
    int victim = 0;
    Vec2 source_pixel;  ///< centroid of the blob's charge, 0-based detector pixels
    int crest_x = 0;  ///< pixel of the victim's detector, 0-based, about which the echo is largest
    int crest_y = 0;  ///< (smoothed over a few pixels: a flat or noisy top has its crest inside)
    double peak_e = 0.0;   ///< of the extreme pixel, signed
    double total_e = 0.0;  ///< over the victim's data pixels, signed
};

/// All echoes whose peak exceeds `least_noise` times the victim's noise. `noise_e`: by channel.
/// Each blob's echo is worked out alone, from its own levels. Ordered by source, blob, victim.
std::vector<Echo> list_echoes(const Instrument& instrument, const Coupling& coupling,
                              const std::vector<Image>& excess, double even_e,
                              const std::vector<double>& noise_e, double least_noise, int threads);

}  // namespace straymark::simulate
