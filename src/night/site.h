#pragma once

#include <array>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "camera/camera.h"
#include "core/pixel_box.h"
#include "mask/decide.h"

namespace straymark {

/// The site file (docs/site_file.md), paths resolved against its own folder.
struct Site {
    std::string path;
    std::string camera_path, calibrations_path, stars_path, history_path, masks_path, digests_path;
    std::optional<std::string> defects_path;
    DecisionSettings decision;
    std::array<bool, kArtifactKinds> predictor_on{true, true, true, true};
    double accept_unassessed_fraction = 0.02;

    Camera camera;
    std::map<int, std::vector<PixelBox>> defects;  ///< by detector index
    std::string defects_digest;                    ///< empty: no list
};

}  // namespace straymark
