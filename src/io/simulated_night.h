#pragma once

#include <cstdint>
#include <functional>
#include <string>

#include "simulate/scenario.h"

namespace straymark::io {

/// What a simulated night came to.
struct NightSummary {
    int exposures = 0;
    int truths = 0;
    std::int64_t listed_stars = 0;
    std::int64_t echoes = 0;
    double lost_e = 0.0;  ///< charge that full columns could not hold
};

/// Makes the night of `scenario` in `folder` (created): raw/, truth/, the camera's and the site's
/// files, stars.csv, calib/ and calib_priors_only/. `done` is called after each exposure with the
/// number made so far. Throws InputError for a star file that cannot be read or an exposure below
/// the horizon, SystemError where the disk refuses; files already complete stay.
NightSummary simulate_night(const simulate::Scenario& scenario, const std::string& folder,
                            int threads, const std::function<void(int)>& done);

}  // namespace straymark::io
