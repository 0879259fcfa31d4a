#pragma once

#include <vector>

#include "exposure/digest.h"
#include "exposure/star_stamp.h"

namespace straymark {

/// Stars without which there is no measured point-spread function.
inline constexpr int kLeastPsfStars = 5;

/// Point-spread function from the stamps of isolated stars: a Moffat profile fitted to all of them,
/// plus what the stars, recentred and stacked robustly, show beyond it; the latter counts only
/// where the stack's noise is below the profile. Source `none` where fewer than kLeastPsfStars
/// look alike or no profile fits. Order of the stamps: any that is reproducible.
Psf measure_psf(std::vector<StarStamp> stamps);

/// Exponent of the Moffat profile of usual seeing.
inline constexpr double kSeeingBeta = 3.0;

/// Half width of the grid for images of this width: 4.5 times it, within 10 to 32 pixels.
int psf_radius(double fwhm_px);

/// Scales `values` to sum 1 and sets the noise-equivalent area.
void normalize_psf(Psf& psf);

}  // namespace straymark
