#pragma once

#include <optional>
#include <string>
#include <vector>

#include "camera/camera.h"
#include "core/frames.h"

namespace straymark {

/// What the headers of one exposure say, after fallbacks. Each fallback taken is stated.
struct ExposureHeader {
    std::string id;
    std::optional<std::string> sequence;
    ExposureType type = ExposureType::sky;
    std::string type_value;  ///< as in the header
    MjdUtc clear;            ///< end of the last clear before the exposure
    MjdUtc start;            ///< shutter opens
    MjdUtc end;              ///< shutter closes
    MjdUtc readout_end;
    double exposure_s = 0.0;
    std::string filter;
    SkyPoint boresight;    ///< ICRS, from the header
    double psi_deg = 0.0;  ///< camera angle by the camera file's sign and zero
    bool pier_flipped = false;
    std::optional<double> temperature;  ///< as in the header
    std::string mode;                   ///< read-out mode, empty: the camera's only one
    std::vector<std::string> notes;     ///< fallbacks: "end: start + exposure (no MJD-END)"

    [[nodiscard]] MjdUtc middle() const { return {0.5 * (start.days + end.days)}; }
};

}  // namespace straymark
