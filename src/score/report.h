#pragma once

#include <string>
#include <vector>

#include "core/value.h"
#include "score/score.h"
#include "score/verdict.h"

namespace straymark::score {

/// One exposure's part of a night.
struct ExposureScore {
    std::string exposure;
    std::string fault;  ///< why its masks could not be used; empty: they were
    Tally tally;
};

/// What was found over a night, for one kind of artifact.
struct NightScore {
    std::string kind;
    std::vector<ExposureScore> exposures;
    Tally total;
    std::vector<Figure> figures;
};

/// Sums the exposures and judges.
NightScore night_score(std::string kind, std::vector<ExposureScore> exposures);

/// Does every exposure have masks of all its detectors?
bool is_complete(const NightScore& night);

/// For a terminal: figures, completeness by response, what was missed and falsely flagged and why,
/// exposures.
std::string table_of(const NightScore& night);

/// All numbers. Ratios of nothing are null.
Value json_of(const NightScore& night);

}  // namespace straymark::score
