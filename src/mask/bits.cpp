#include "mask/bits.h"

namespace straymark {

const std::array<MaskBitEntry, 13> kMaskBits = {{
    {MaskBit::saturated, "saturated", "raw value at or above the amplifier's saturation", true},
    {MaskBit::bleed, "bleed", "charge spilled along the columns from a saturated core", true},
    {MaskBit::crosstalk_positive, "crosstalk_positive",
     "predicted crosstalk echo matters, response positive", true},
    {MaskBit::crosstalk_negative, "crosstalk_negative",
     "predicted crosstalk echo matters, response negative", true},
    {MaskBit::ghost, "ghost", "predicted ghost matters", true},
    {MaskBit::spike, "spike", "predicted diffraction spike matters", true},
    {MaskBit::persistence, "persistence", "predicted released charge matters", true},
    {MaskBit::defect, "defect", "listed as a permanent defect, or a dead amplifier", true},
    {MaskBit::marginal, "marginal", "a measured artifact's bound matters, its estimate does not",
     false},
    {MaskBit::crosstalk_unassessed, "crosstalk_unassessed",
     "crosstalk that could matter here is not known", false},
    {MaskBit::ghost_unassessed, "ghost_unassessed", "ghosts that could matter here are not known",
     false},
    {MaskBit::spike_unassessed, "spike_unassessed", "spikes that could matter here are not known",
     false},
    {MaskBit::persistence_unassessed, "persistence_unassessed",
     "persistence that could matter here is not known", false},
}};

ArtifactBits bits_of(ArtifactKind kind) {
    switch (kind) {
        case ArtifactKind::crosstalk:
            return {MaskBit::crosstalk_positive, MaskBit::crosstalk_negative,
                    MaskBit::crosstalk_unassessed};
        case ArtifactKind::ghost:
            return {MaskBit::ghost, MaskBit::ghost, MaskBit::ghost_unassessed};
        case ArtifactKind::spike:
            return {MaskBit::spike, MaskBit::spike, MaskBit::spike_unassessed};
        case ArtifactKind::persistence:
            return {MaskBit::persistence, MaskBit::persistence, MaskBit::persistence_unassessed};
    }
    return {};
}

}  // namespace straymark
