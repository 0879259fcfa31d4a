#pragma once

#include <span>
#include <vector>

#include "exposure/moffat.h"
#include "exposure/star_stamp.h"

namespace straymark {

/// One star's own parameters under the common shape; offsets from its stamp's central pixel.
struct StarFit {
    double amplitude_adu = 0.0;
    double dx = 0.0;
    double dy = 0.0;
    double background_adu = 0.0;
    double misfit = 0.0;  ///< mean squared residual in units of the errors, each at most 9
};

struct MoffatFit {
    bool converged = false;
    MoffatShape shape;
    std::vector<StarFit> stars;  ///< as the stamps
};

/// Fits one pixel-averaged Moffat profile to all stamps at once, with amplitude and position of
/// each star free, to the pixels within `radius_px` of each star. Its background is the median of
/// the stamp's pixels beyond, less the profile there: free in the fit it would take up what a
/// profile lacks in its wings. Robust: Huber weights (3 sigma). Levenberg-Marquardt on the common
/// parameters after elimination of the stars' (Schur complement), so the cost is linear in the
/// pixels.
///
/// Begins with `start` and the stamps' own centroids and fluxes; pixel errors and backgrounds are
/// those that these predict, so a second fit, begun with the result of the first, is a better one.
MoffatFit fit_moffat(std::span<const StarStamp> stamps, const MoffatShape& start, double radius_px);

}  // namespace straymark
