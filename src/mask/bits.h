#pragma once

#include <array>
#include <cstdint>
#include <string_view>

#include "artifacts/mark.h"

/// The contract on bits (docs/conventions.md). Never renumber.

namespace straymark {

using MaskPixel = std::int16_t;

enum class MaskBit : std::uint8_t {
    saturated = 0,
    bleed = 1,
    crosstalk_positive = 2,
    crosstalk_negative = 3,
    ghost = 4,
    spike = 5,
    persistence = 6,
    defect = 7,
    marginal = 8,
    crosstalk_unassessed = 9,
    ghost_unassessed = 10,
    spike_unassessed = 11,
    persistence_unassessed = 12,
};

struct MaskBitEntry {
    MaskBit bit;
    std::string_view name;
    std::string_view meaning;
    bool mask_by_default;
};

/// All bits in use, in order: the BITS table of every mask file.
extern const std::array<MaskBitEntry, 13> kMaskBits;

constexpr MaskPixel value_of(MaskBit bit) {
    return static_cast<MaskPixel>(1U << static_cast<unsigned>(bit));
}

/// The bits that one artifact sets: for a positive and a negative response, and unassessed.
struct ArtifactBits {
    MaskBit positive, negative, unassessed;
};
ArtifactBits bits_of(ArtifactKind kind);

}  // namespace straymark
