#pragma once

#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "camera/camera.h"
#include "core/frames.h"

namespace straymark {

/// A FITS world coordinate system of one detector image, by WCSLIB. TAN, TPV (also TAN with PV
/// cards) and TAN-SIP. Const calls may come from several threads at once.
class Wcs {
public:
    /// cards: 80-character header cards; only the WCS ones are handed to the library, after their
    /// quoting was checked. Throws InputError (TNX and ZPX refused by name, unclosed quote,
    /// singular matrix, ...); `file` and `place` are for its message.
    Wcs(const std::vector<std::string>& cards, const std::string& file, const std::string& place);
    ~Wcs();
    Wcs(Wcs&&) noexcept;
    Wcs& operator=(Wcs&&) noexcept;

    /// Do these cards carry a celestial WCS at all (CTYPE1 and CTYPE2 present)?
    static bool present(const std::vector<std::string>& cards);

    [[nodiscard]] SkyPoint sky_from_detector(DetectorPoint point) const;
    /// Nothing where the solution does not reach: 90 degrees or more from its reference point, or
    /// where a distortion polynomial cannot be inverted.
    [[nodiscard]] std::optional<DetectorPoint> detector_from_sky(SkyPoint point) const;
    /// The cards that were used, for the mask file.
    [[nodiscard]] const std::vector<std::string>& cards() const;

private:
    struct Impl;
    std::unique_ptr<Impl> impl_;
};

/// Where the camera pointed. sigma_*: errors of the refined values; unrefined: header values.
struct Pointing {
    SkyPoint boresight;
    double psi_deg = 0.0;  ///< camera angle
    bool refined = false;
    int matched_stars = 0;
    double residual_px = 0.0;   ///< rms per axis, robust
    double shift_arcsec = 0.0;  ///< from the header's pointing
    double turn_deg = 0.0;      ///< from the header's camera angle
    std::string reason;         ///< why not refined
};

SkyPoint sky_from_detector(const Camera& camera, const Pointing& pointing, int detector,
                           DetectorPoint point);
/// Nothing for a direction 90 degrees or more from the boresight.
std::optional<DetectorPoint> detector_from_sky(const Camera& camera, const Pointing& pointing,
                                               int detector, SkyPoint point);

/// WCS cards (TAN, or TAN-SIP where the camera is distorted) of one detector under this pointing,
/// good to 0.02 px over the detector; FITS 1-based, 80 characters each.
std::vector<std::string> wcs_cards(const Camera& camera, const Pointing& pointing, int detector);

}  // namespace straymark
