#include "exposure/signal_lookup.h"

#include <algorithm>

namespace straymark {
namespace {

/// ADU above the sky, zero where no run holds the index.
float kept_value(const AmplifierDigest& digest, ReadoutIndex index) {
    const auto after = std::partition_point(
        digest.runs.begin(), digest.runs.end(), [index](const ReadoutRun& run) {
            return run.row != index.row ? run.row < index.row : run.tick <= index.tick;
        });
    if (after == digest.runs.begin()) {
        return 0.0F;
    }
    const ReadoutRun& run = *std::prev(after);
    if (run.row != index.row || index.tick >= run.tick + run.length) {
        return 0.0F;
    }
    return digest.values[run.first_value + static_cast<std::size_t>(index.tick - run.tick)];
}

}  // namespace

SignalLookup::Pixel SignalLookup::at(DetectorPixel pixel) const {
    for (std::size_t a = 0; a < amplifiers_.size(); ++a) {
        const Amplifier& amplifier = detector_.amplifiers[a];
        const AmplifierDigest& digest = amplifiers_[a];
        if (digest.state != AmplifierState::ok ||
            !amplifier.readout.section().contains(pixel.x, pixel.y)) {
            continue;
        }
        const double gain = amplifier.gain_e_per_adu;
        return {true, gain * kept_value(digest, amplifier.readout.readout_from_detector(pixel)),
                gain * digest.noise_adu, gain * digest.floor_adu};
    }
    return {};
}

}  // namespace straymark
