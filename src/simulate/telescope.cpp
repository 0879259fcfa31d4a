#include "simulate/telescope.h"

#include <cmath>

namespace straymark::simulate {
namespace {

constexpr double kMjdJ2000 = 51544.5;
constexpr double kDaysPerCentury = 36525.0;
constexpr double kLowestAltitudeDeg = 10.0;
constexpr double kWidestFieldDeg = 60.0;

constexpr Vec3 kYAxis{0.0, 1.0, 0.0};

/// Directions east and north as seen towards `ahead`.
struct Compass {
    Vec3 east, north;
};
Compass compass(Vec3 ahead) {
    const Vec3 east = unit(cross(kPole, ahead));
    return {east, cross(ahead, east)};
}

}  // namespace

Vec3 zenith(const SitePlan& site, double mjd) {
    const double days = mjd - kMjdJ2000;
    const double t = days / kDaysPerCentury;
    // Sidereal time of date: the Earth's rotation angle and the precession of the origin.
    const double rotation =
        2.0 * std::numbers::pi *
        std::fmod(0.7790572732640 + 0.00273781191135448 * days + std::fmod(days, 1.0), 1.0);
    const double precession_in_ra =
        (0.014506 + (4612.156534 + (1.3915817 - 0.00000044 * t) * t) * t) * kArcsecond;
    const double sidereal = rotation + precession_in_ra + radians(site.longitude_deg);
    const Vec3 of_date = direction(degrees(sidereal), site.latitude_deg);
    // The equatorial precession angles carry the pole of date back to the pole of J2000.
    const double zeta = (2.650545 + (2306.083227 + (0.2988499 + 0.01801828 * t) * t) * t);
    const double z = (-2.650545 + (2306.077181 + (1.0927348 + 0.01826837 * t) * t) * t);
    const double theta = (2004.191903 - (0.4294934 + 0.04182264 * t) * t) * t;
    const Vec3 back_z = turned(of_date, kPole, -z * kArcsecond);
    const Vec3 back_theta = turned(back_z, kYAxis, theta * kArcsecond);
    return turned(back_theta, kPole, -zeta * kArcsecond);
}

std::optional<double> airmass(Vec3 towards_zenith, Vec3 towards_star) {
    const double c = dot(towards_zenith, towards_star);
    if (c < std::sin(radians(kLowestAltitudeDeg))) {
        return std::nullopt;
    }
    const double secant = 1.0 / c;
    return secant * (1.0 - 0.0012 * (secant * secant - 1.0));
}

Aim::Aim(const TelescopePlan& telescope, Vec3 ahead, double camera_angle_deg)
    : ahead_(ahead),
      focal_length_mm_(telescope.focal_length_mm),
      third_order_(telescope.stretch_third_order),
      fifth_order_(telescope.stretch_fifth_order) {
    const auto [east, north] = compass(ahead);
    const double angle = radians(camera_angle_deg);
    up_ = std::cos(angle) * north + std::sin(angle) * east;
    // Looking along `ahead` with `up` overhead, the right hand points along ahead x up; an odd
    // number of mirrors swaps left and right.
    right_ = (telescope.mirrored ? -1.0 : 1.0) * cross(ahead, up_);
}

std::optional<Vec2> Aim::image(Vec3 star) const {
    const double along = dot(star, ahead_);
    if (along < std::cos(radians(kWidestFieldDeg))) {
        return std::nullopt;
    }
    const Vec2 plane{dot(star, right_) / along, dot(star, up_) / along};
    const double square = dot(plane, plane);
    const double stretch = 1.0 + square * (third_order_ + square * fifth_order_);
    return focal_length_mm_ * stretch * plane;
}

Vec3 nudged(Vec3 ahead, Vec2 east_north_arcsec) {
    const auto [east, north] = compass(ahead);
    const double size = std::sqrt(dot(east_north_arcsec, east_north_arcsec));
    if (size == 0.0) {
        return ahead;
    }
    const Vec3 towards = (east_north_arcsec.x / size) * east + (east_north_arcsec.y / size) * north;
    return std::cos(size * kArcsecond) * ahead + std::sin(size * kArcsecond) * towards;
}

Equatorial equatorial(Vec3 towards) {
    double ra_deg = degrees(std::atan2(towards.y, towards.x));
    if (ra_deg < 0.0) {
        ra_deg += 360.0;
    }
    return {ra_deg, degrees(std::atan2(towards.z, std::hypot(towards.x, towards.y)))};
}

}  // namespace straymark::simulate
