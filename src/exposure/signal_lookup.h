#pragma once

#include <vector>

#include "camera/camera.h"
#include "core/frames.h"
#include "exposure/digest.h"

namespace straymark {

/// Finds the signal that a detector's digest kept at a pixel. Refers to its arguments.
class SignalLookup {
public:
    SignalLookup(const Detector& detector, const std::vector<AmplifierDigest>& amplifiers)
        : detector_(detector), amplifiers_(amplifiers) {}

    struct Pixel {
        bool on_detector = false;  ///< on an amplifier that is `ok`
        double signal_e = 0.0;     ///< above the local sky; zero where it is below the floor
        double noise_e = 0.0;      ///< of the amplifier's sky
        double floor_e = 0.0;      ///< of what the amplifier's digest keeps
    };
    /// O(amplifiers + log runs).
    [[nodiscard]] Pixel at(DetectorPixel pixel) const;

private:
    const Detector& detector_;
    const std::vector<AmplifierDigest>& amplifiers_;
};

}  // namespace straymark
