#pragma once

#include <array>
#include <map>
#include <memory>
#include <optional>
#include <string>

#include "artifacts/artifact.h"
#include "night/ports.h"
#include "night/site.h"

namespace straymark {

/// One artifact for one exposure: its predictor, or why there is none.
struct PredictorInForce {
    std::shared_ptr<const Predictor> predictor;  ///< null: see `state` and `reason`
    AssessmentState state = AssessmentState::off;
    std::string reason;
    std::string product_digest;
    DetectionContext context;
};

/// Finds for each exposure the predictors of the products in force, and keeps them: a night mostly
/// uses one product of each kind.
class PredictorShelf {
public:
    PredictorShelf(const Site& site, const CalibrationStore& calibrations)
        : site_(site), calibrations_(calibrations) {}

    /// Throws InputError where two products are in force or one does not fit the camera.
    std::array<PredictorInForce, kArtifactKinds> in_force(const ExposureHeader& header);

private:
    PredictorInForce find(const Artifact& artifact, const ExposureHeader& header);

    const Site& site_;
    const CalibrationStore& calibrations_;
    std::map<std::string, std::shared_ptr<const Predictor>> made_;  ///< by kind and product digest
};

}  // namespace straymark
