#include <array>

#include "artifacts/artifact.h"
#include "artifacts/crosstalk/predict.h"

namespace straymark {

std::span<const Artifact> registry() {
    static const std::array<Artifact, kArtifactKinds> kArtifacts = {{
        {ArtifactKind::crosstalk, "crosstalk", &crosstalk::make_predictor},
        {ArtifactKind::ghost, "ghost", nullptr},
        {ArtifactKind::spike, "spike", nullptr},
        {ArtifactKind::persistence, "persistence", nullptr},
    }};
    return kArtifacts;
}

}  // namespace straymark
