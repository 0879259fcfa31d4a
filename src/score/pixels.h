#pragma once

#include <array>
#include <cstdint>
#include <span>
#include <string_view>
#include <vector>

#include "score/found.h"
#include "score/truth.h"

/// Masks against truth, pixel by pixel.

namespace straymark::score {

/// A pixel of this response, or more, must be flagged.
inline constexpr double kRequiredResponse = 1.5;
/// The true area: what a perfect mask at threshold 1 would flag.
inline constexpr double kTrueResponse = 1.0;

/// Lower edges of the bins of |response|; the last one has no end.
inline constexpr std::array kResponseEdges{0.5, 0.75, 1.0, 1.25, 1.5, 2.0, 3.0, 5.0, 7.0, 10.0};

struct ResponseBin {
    std::int64_t pixels = 0;
    std::int64_t flagged = 0;  ///< with the bit of the response's sign
    std::int64_t marginal = 0;
    std::int64_t unassessed = 0;
};

/// Why a pixel that had to be flagged is not, the first that holds.
enum class MissReason {
    no_mask,
    wrong_sign,
    amplifier_unusable,
    saturated_or_bleed,
    defect,
    unassessed,
    marginal,
    beside_mark,
    no_mark,
    count
};
/// Why a flagged pixel is not of the true area, the first that holds.
enum class FalseReason {
    wrong_sign,
    just_below,
    beside_true,
    mark_without_echo,
    nothing_near,
    count
};

std::string_view text_of(MissReason reason);
std::string_view text_of(FalseReason reason);

struct PixelTally {
    std::array<ResponseBin, kResponseEdges.size()> bins{};
    std::array<std::int64_t, static_cast<std::size_t>(MissReason::count)> missed{};
    std::array<std::int64_t, static_cast<std::size_t>(FalseReason::count)> falsely_flagged{};
    std::int64_t pixels = 0;
    std::int64_t required = 0;          ///< |response| >= kRequiredResponse
    std::int64_t required_flagged = 0;  ///< of these, with the bit of the right sign
    std::int64_t true_area = 0;         ///< |response| >= kTrueResponse
    std::int64_t flagged_area = 0;      ///< either bit
    std::int64_t marginal = 0;
    std::int64_t unassessed = 0;

    PixelTally& operator+=(const PixelTally& other);
};

/// `mark_has_echo`: for each of found.marks, whether a true echo lies there.
PixelTally tally_pixels(const TrueDetector& truth, std::span<const float> response,
                        const FoundDetector& found, const std::vector<bool>& mark_has_echo);

/// The bit of the response's sign, and not the other, is set. False where there is no mask.
bool flagged_as(const FoundDetector& found, std::size_t index, double response);

}  // namespace straymark::score
