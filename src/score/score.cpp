#include "score/score.h"

#include <algorithm>

namespace straymark::score {
namespace {

AmplifierCheck check_of(const TrueAmplifier& truth, const std::vector<FoundAmplifier>& rows) {
    const auto row = std::find_if(
        rows.begin(), rows.end(),
        [&truth](const FoundAmplifier& candidate) { return candidate.name == truth.name; });
    if (row == rows.end() || !row->usable) {
        return {truth.name, false, 0.0, 0.0};
    }
    return {truth.name, true, row->gain_e_per_adu / truth.gain_e_per_adu,
            row->noise_e / truth.noise_e};
}

}  // namespace

Tally& Tally::operator+=(const Tally& other) {
    pixels += other.pixels;
    echoes += other.echoes;
    amplifiers.insert(amplifiers.end(), other.amplifiers.begin(), other.amplifiers.end());
    detectors += other.detectors;
    detectors_without_mask += other.detectors_without_mask;
    return *this;
}

Tally score_detector(const TrueDetector& truth, std::span<const float> response,
                     const FoundDetector& found) {
    const EchoResult echoes = tally_echoes(truth, response, found);
    Tally tally;
    tally.pixels = tally_pixels(truth, response, found, echoes.mark_has_echo);
    tally.echoes = echoes.tally;
    tally.detectors = 1;
    tally.detectors_without_mask = found.present ? 0 : 1;
    if (found.present) {
        for (const TrueAmplifier& amplifier : truth.amplifiers) {
            tally.amplifiers.push_back(check_of(amplifier, found.amplifiers));
        }
    }
    return tally;
}

}  // namespace straymark::score
