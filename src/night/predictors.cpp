#include "night/predictors.h"

#include <fmt/format.h>

namespace straymark {

std::array<PredictorInForce, kArtifactKinds> PredictorShelf::in_force(
    const ExposureHeader& header) {
    std::array<PredictorInForce, kArtifactKinds> all;
    for (const Artifact& artifact : registry()) {
        all[static_cast<std::size_t>(artifact.kind)] = find(artifact, header);
    }
    return all;
}

PredictorInForce PredictorShelf::find(const Artifact& artifact, const ExposureHeader& header) {
    const auto kind = static_cast<std::size_t>(artifact.kind);
    PredictorInForce result;
    result.context = {site_.decision.threshold[kind], site_.decision.background_px,
                      site_.decision.template_noise};
    if (artifact.make == nullptr) {
        result.reason = "this version of the program does not predict it";
        return result;
    }
    if (!site_.predictor_on[kind]) {
        result.reason = "switched off in the site file";
        return result;
    }
    const auto product = calibrations_.in_force(artifact.name, site_.camera, header);
    if (!product) {
        result.state = AssessmentState::unassessed;
        result.reason = fmt::format(
            "no {} product in force for filter {}{} at MJD {:.5f}", artifact.name, header.filter,
            header.mode.empty() ? "" : ", mode " + header.mode, header.start.days);
        return result;
    }
    std::shared_ptr<const Predictor>& predictor = made_[artifact.name + " " + product->digest];
    if (!predictor) {
        predictor = artifact.make(site_.camera, *product);
    }
    result.predictor = predictor;
    result.state = AssessmentState::assessed;
    result.product_digest = product->digest;
    return result;
}

}  // namespace straymark
