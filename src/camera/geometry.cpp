#include "camera/geometry.h"

#include <algorithm>
#include <cmath>
#include <limits>
#include <numbers>

namespace straymark {
namespace {

constexpr double kRadiansPerDegree = std::numbers::pi / 180.0;
constexpr double kMillimetresPerMicrometre = 1e-3;

/// Cosine and sine of an angle, exact at multiples of 90 degrees: a detector turned by 90 degrees
/// must not be sheared by 1e-16.
struct Rotation {
    double cosine = 1.0;
    double sine = 0.0;
};

Rotation rotation_by(double angle_deg) {
    const double turned = std::remainder(angle_deg, 360.0);
    if (turned == 0.0) {
        return {1.0, 0.0};
    }
    if (std::abs(turned) == 180.0) {
        return {-1.0, 0.0};
    }
    if (std::abs(turned) == 90.0) {
        return {0.0, turned > 0.0 ? 1.0 : -1.0};
    }
    return {std::cos(turned * kRadiansPerDegree), std::sin(turned * kRadiansPerDegree)};
}

/// r / F as a function of t, the tangent of the field angle.
class RadialDistortion {
public:
    explicit RadialDistortion(const FocalPlane& plane)
        : k1_(plane.k1), k2_(plane.k2), turning_t_(turning_point(plane.k1, plane.k2)) {}

    [[nodiscard]] double turning_t() const { return turning_t_; }

    [[nodiscard]] double stretched(double t) const {
        return t <= turning_t_ ? polynomial(t) : polynomial(turning_t_) + (t - turning_t_);
    }

    /// Inverse of `stretched` to 1e-14: Newton's method inside a bracket that only shrinks, since
    /// the slope may vanish at the turning point.
    [[nodiscard]] double unstretched(double r) const {
        if (k1_ == 0.0 && k2_ == 0.0) {
            return r;
        }
        double low = 0.0;
        double high = std::max(r, 1e-3);
        while (stretched(high) < r) {
            low = high;
            high *= 2.0;
        }
        double t = std::clamp(r, low, high);
        constexpr int kMostSteps = 200;
        for (int step = 0; step < kMostSteps; ++step) {
            const double excess = stretched(t) - r;
            (excess > 0.0 ? high : low) = t;
            double next = t - excess / slope(t);
            if (!(next > low && next < high)) {
                next = 0.5 * (low + high);
            }
            const double change = std::abs(next - t);
            t = next;
            if (change <= 1e-16 + 4e-16 * t) {
                break;
            }
        }
        return t;
    }

private:
    [[nodiscard]] double polynomial(double t) const {
        const double t2 = t * t;
        return t * (1.0 + t2 * (k1_ + t2 * k2_));
    }
    [[nodiscard]] double slope(double t) const {
        const double t2 = t * t;
        return t <= turning_t_ ? 1.0 + t2 * (3.0 * k1_ + t2 * 5.0 * k2_) : 1.0;
    }
    /// The smallest t > 0 with 1 + 3 k1 t^2 + 5 k2 t^4 = 0; infinity where there is none.
    static double turning_point(double k1, double k2) {
        const double b = 3.0 * k1;
        const double discriminant = b * b - 20.0 * k2;
        if ((k1 >= 0.0 && k2 >= 0.0) || discriminant < 0.0) {
            return std::numeric_limits<double>::infinity();
        }
        // 2 / (-b + sqrt) is the root of smaller magnitude, free of cancellation, also for k2 = 0.
        const double t2 = 2.0 / (-b + std::sqrt(discriminant));
        return t2 > 0.0 ? std::sqrt(t2) : std::numeric_limits<double>::infinity();
    }

    double k1_, k2_, turning_t_;
};

/// A unit vector in the focal plane.
struct FocalDirection {
    double x = 0.0;
    double y = 1.0;
};

/// The focal direction in which a position angle lies.
FocalDirection focal_direction(const FocalPlane& plane, double psi_deg, double position_angle_deg) {
    const Rotation turn = rotation_by(position_angle_deg - psi_deg);
    return {-plane.parity * turn.sine, turn.cosine};
}

}  // namespace

FocalPoint focal_from_detector(const FocalPlane& plane, const Detector& detector,
                               DetectorPoint point) {
    const double pixel_mm = plane.pixel_um * kMillimetresPerMicrometre;
    const double across = point.x_px - 0.5 * (detector.width - 1);
    const double right_mm = pixel_mm * (detector.flip ? -across : across);
    const double up_mm = pixel_mm * (point.y_px - 0.5 * (detector.height - 1));
    const Rotation turn = rotation_by(detector.rotation_deg);
    return {detector.centre.x_mm + turn.cosine * right_mm - turn.sine * up_mm,
            detector.centre.y_mm + turn.sine * right_mm + turn.cosine * up_mm};
}

DetectorPoint detector_from_focal(const FocalPlane& plane, const Detector& detector,
                                  FocalPoint point) {
    const double pixel_mm = plane.pixel_um * kMillimetresPerMicrometre;
    const Rotation turn = rotation_by(detector.rotation_deg);
    const double dx = point.x_mm - detector.centre.x_mm;
    const double dy = point.y_mm - detector.centre.y_mm;
    const double right_px = (turn.cosine * dx + turn.sine * dy) / pixel_mm;
    const double up_px = (-turn.sine * dx + turn.cosine * dy) / pixel_mm;
    return {0.5 * (detector.width - 1) + (detector.flip ? -right_px : right_px),
            0.5 * (detector.height - 1) + up_px};
}

FocalPoint focal_from_tangent(const Telescope& telescope, const FocalPlane& plane, double psi_deg,
                              TangentPoint point) {
    const Rotation psi = rotation_by(psi_deg);
    const double t = std::hypot(point.xi_rad, point.eta_rad);
    const double stretch = t > 0.0 ? RadialDistortion(plane).stretched(t) / t : 1.0;
    const double scale_mm = telescope.focal_length_mm * stretch;
    return {-plane.parity * scale_mm * (point.xi_rad * psi.cosine - point.eta_rad * psi.sine),
            scale_mm * (point.xi_rad * psi.sine + point.eta_rad * psi.cosine)};
}

TangentPoint tangent_from_focal(const Telescope& telescope, const FocalPlane& plane, double psi_deg,
                                FocalPoint point) {
    const Rotation psi = rotation_by(psi_deg);
    const double r = std::hypot(point.x_mm, point.y_mm) / telescope.focal_length_mm;
    const double shrink = r > 0.0 ? RadialDistortion(plane).unstretched(r) / r : 1.0;
    const double along = -plane.parity * point.x_mm * shrink / telescope.focal_length_mm;
    const double up = point.y_mm * shrink / telescope.focal_length_mm;
    return {along * psi.cosine + up * psi.sine, -along * psi.sine + up * psi.cosine};
}

double distortion_reach_mm(const Telescope& telescope, const FocalPlane& plane) {
    const RadialDistortion distortion(plane);
    const double t = distortion.turning_t();
    return std::isinf(t) ? t : telescope.focal_length_mm * distortion.stretched(t);
}

TelescopePoint telescope_from_focal(const FocalPlane& plane, double psi_deg, double tube_top_deg,
                                    FocalPoint point) {
    const FocalDirection v = focal_direction(plane, psi_deg, tube_top_deg);
    // u is v turned by -90 degrees in (x, y): (v.y, -v.x).
    return {point.x_mm * v.y - point.y_mm * v.x, point.x_mm * v.x + point.y_mm * v.y};
}

FocalPoint focal_from_telescope(const FocalPlane& plane, double psi_deg, double tube_top_deg,
                                TelescopePoint point) {
    const FocalDirection v = focal_direction(plane, psi_deg, tube_top_deg);
    return {point.u_mm * v.y + point.v_mm * v.x, -point.u_mm * v.x + point.v_mm * v.y};
}

}  // namespace straymark
