#pragma once

#include <compare>

/// The frames of docs/conventions.md, each with a type of its own, so that a point of one frame
/// cannot be passed where another is meant. Conversions live in camera/ and sky/ only.

namespace straymark {

/// ICRS direction, degrees. Valid: 0 <= ra < 360, -90 <= dec <= 90.
struct SkyPoint {
    double ra_deg = 0.0;
    double dec_deg = 0.0;
};

/// Gnomonic standard coordinates about a boresight: xi to the east, eta to the north; radians.
struct TangentPoint {
    double xi_rad = 0.0;
    double eta_rad = 0.0;
};

/// Focal plane, fixed to the camera body, origin on the rotator axis; millimetres.
struct FocalPoint {
    double x_mm = 0.0;
    double y_mm = 0.0;
};

/// Focal plane, fixed to the tube: v towards the tube's top, u is v turned by -90 degrees; mm.
struct TelescopePoint {
    double u_mm = 0.0;
    double v_mm = 0.0;
};

/// A place on the assembled, trimmed detector image; pixels. 0-based: the centre of the first
/// pixel is (0, 0). People and files see x + 1, y + 1 (FITS); only `io/` and `cli/` add the one.
struct DetectorPoint {
    double x_px = 0.0;
    double y_px = 0.0;
};

/// A whole pixel of the assembled, trimmed detector image, 0-based.
struct DetectorPixel {
    int x = 0;
    int y = 0;
    friend bool operator==(const DetectorPixel&, const DetectorPixel&) = default;
};

/// The moment at which a pixel of one amplifier is clocked out: ticks from the start of its row
/// (prescan included) and rows from the first row read.
struct ReadoutIndex {
    int tick = 0;
    int row = 0;
    friend bool operator==(const ReadoutIndex&, const ReadoutIndex&) = default;
};

/// An instant: Modified Julian Date on the UTC scale.
struct MjdUtc {
    double days = 0.0;
    friend auto operator<=>(const MjdUtc&, const MjdUtc&) = default;
};

inline constexpr double kSecondsPerDay = 86400.0;

}  // namespace straymark
