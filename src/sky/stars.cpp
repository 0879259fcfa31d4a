#include "sky/stars.h"

#include <cmath>
#include <erfa.h>
#include <erfam.h>

namespace straymark {

// The star moves straight through space at right angles to the line of sight: its direction turns
// in the plane of position and motion, that is, along a great circle.
// Source: The Hipparcos Catalogue, ESA SP-1200, vol. 1, sec. 1.5.5, without radial velocity.
SkyPoint propagated(const Star& star, MjdUtc mjd) {
    const double years = eraEpj(ERFA_DJM0, mjd.days) - star.epoch;
    if (years == 0.0 || (star.pm_ra_mas_yr == 0.0 && star.pm_dec_mas_yr == 0.0)) {
        return star.position;
    }
    const double east = 1e-3 * ERFA_DAS2R * star.pm_ra_mas_yr * years;
    const double north = 1e-3 * ERFA_DAS2R * star.pm_dec_mas_yr * years;
    const double ra = star.position.ra_deg * ERFA_DD2R;
    const double dec = star.position.dec_deg * ERFA_DD2R;
    const double x = std::cos(dec) - north * std::sin(dec);  // away from the pole, at ra
    const double y = east;
    const double z = std::sin(dec) + north * std::cos(dec);
    const double ra_deg = eraAnp(ra + std::atan2(y, x)) * ERFA_DR2D;
    return {ra_deg < 360.0 ? ra_deg : 0.0, std::atan2(z, std::hypot(x, y)) * ERFA_DR2D};
}

}  // namespace straymark
