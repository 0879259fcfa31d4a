#pragma once

#include <cstdint>
#include <span>
#include <string>
#include <vector>

#include "score/found.h"
#include "score/truth.h"

/// Marks against the echoes that were injected, one by one.

namespace straymark::score {

/// An echo that had to be found: the response at its peak, signed as the echo, is at least
/// kRequiredResponse, and so is the bound on what it could make alone, |peak| / (noise sqrt(sum
/// P^2)).
struct RequiredEcho {
    std::string victim, source;
    bool flagged = false;  ///< the pixel of its peak carries the bit of its sign
    bool listed = false;   ///< a mark of the same source lies on it, in the same victim
    /// How far the mark's place lies from the echo's, judged only for compact echoes with a mark of
    /// their own. The echo's place is its own peak or that of the true response near by, whichever
    /// is nearer to the mark: noise moves the one by a pixel, neighbours move the other.
    bool place_judged = false;
    double dx_px = 0.0;
    double dy_px = 0.0;
};

/// The strongest mark and the strongest echo among those of one victim and source that lie on each
/// other, by their extreme pixels: totals depend on how far out a star's wings are followed.
struct StrengthMatch {
    std::string victim, source;
    double truth_e = 0.0;
    double predicted_e = 0.0;
    double error_e = 0.0;  ///< of the prediction, 1 sigma
};

struct EchoTally {
    std::vector<RequiredEcho> echoes;
    std::vector<StrengthMatch> strengths;  ///< groups that hold a required echo, measured marks
    std::int64_t marks = 0;
    std::int64_t marks_without_echo = 0;

    EchoTally& operator+=(const EchoTally& other);
};

/// A mark whose place is no farther than this, in x and in y, from an echo's peak, or whose box
/// holds the peak, lies on that echo.
inline constexpr double kSamePlacePx = 4.0;
inline constexpr int kPlaceSearchPx = 2;
/// Where a peak lies between two pixels either may come out as the larger; their responses differ
/// by less than this fraction. A whole pixel off its peak a star's is down by 4 to 11 % (standard
/// deviation 2.5 to 1.5 px: exp(-1 / 4 s^2)).
inline constexpr double kSameResponse = 0.03;

struct EchoResult {
    EchoTally tally;
    std::vector<bool> mark_has_echo;  ///< for each of found.marks
};

/// One detector; `response` as from true_response.
EchoResult tally_echoes(const TrueDetector& truth, std::span<const float> response,
                        const FoundDetector& found);

}  // namespace straymark::score
