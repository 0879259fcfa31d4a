#pragma once

#include <functional>
#include <string>
#include <vector>

#include "night/ports.h"

namespace straymark {

/// Something that was handed over and not used, with the reason in full.
struct Skipped {
    std::string file;
    std::string reason;
    bool harmless = false;  ///< a second copy of the same file, a dark: nothing is missing
};

/// The raw files of one exposure.
struct PlannedExposure {
    ExposureHeader header;
    std::vector<RawFile> files;  ///< by name
};

/// What a night of raw files amounts to: exposures in time order, and what was left out.
struct NightPlan {
    std::vector<PlannedExposure> exposures;
    std::vector<Skipped> skipped;
};

/// Looks at every file and sorts them into exposures. A bad file, two files of one mask, two
/// different contents for one detector of one exposure, headers of one exposure that disagree: each
/// is skipped and said, and the rest goes on. The same result for any order of `paths`.
NightPlan plan_night(const RawReader& reader, const MaskStore& masks,
                     const std::vector<std::string>& paths, int threads);

}  // namespace straymark
