#pragma once

#include <cmath>
#include <numbers>

/// Plain vector geometry of the simulated world. Directions on the sky are unit vectors, places on
/// the focal plane are millimetres. Deliberately none of the frames and conversions by which the
/// rest of the program finds its way: whatever is simulated here must be found again by another
/// road.

namespace straymark::simulate {

struct Vec2 {
    double x = 0.0;
    double y = 0.0;
};

constexpr Vec2 operator+(Vec2 a, Vec2 b) {
    return {a.x + b.x, a.y + b.y};
}
constexpr Vec2 operator-(Vec2 a, Vec2 b) {
    return {a.x - b.x, a.y - b.y};
}
constexpr Vec2 operator*(double s, Vec2 a) {
    return {s * a.x, s * a.y};
}
constexpr double dot(Vec2 a, Vec2 b) {
    return a.x * b.x + a.y * b.y;
}
/// Third component of the cross product: positive where b lies counter-clockwise of a.
constexpr double cross(Vec2 a, Vec2 b) {
    return a.x * b.y - a.y * b.x;
}

struct Vec3 {
    double x = 0.0;
    double y = 0.0;
    double z = 0.0;
};

constexpr Vec3 operator+(Vec3 a, Vec3 b) {
    return {a.x + b.x, a.y + b.y, a.z + b.z};
}
constexpr Vec3 operator-(Vec3 a, Vec3 b) {
    return {a.x - b.x, a.y - b.y, a.z - b.z};
}
constexpr Vec3 operator*(double s, Vec3 a) {
    return {s * a.x, s * a.y, s * a.z};
}
constexpr double dot(Vec3 a, Vec3 b) {
    return a.x * b.x + a.y * b.y + a.z * b.z;
}
constexpr Vec3 cross(Vec3 a, Vec3 b) {
    return {a.y * b.z - a.z * b.y, a.z * b.x - a.x * b.z, a.x * b.y - a.y * b.x};
}
inline Vec3 unit(Vec3 a) {
    return (1.0 / std::sqrt(dot(a, a))) * a;
}

/// `a` turned about the unit vector `axis` by `angle` radians, right-handed (Rodrigues).
inline Vec3 turned(Vec3 a, Vec3 axis, double angle) {
    const double c = std::cos(angle);
    return c * a + std::sin(angle) * cross(axis, a) + ((1.0 - c) * dot(axis, a)) * axis;
}

constexpr double radians(double degrees) {
    return degrees * std::numbers::pi / 180.0;
}
constexpr double degrees(double radians) {
    return radians * 180.0 / std::numbers::pi;
}
constexpr double kArcsecond = std::numbers::pi / 648000.0;  ///< in radians

/// The celestial pole (ICRS).
inline constexpr Vec3 kPole{0.0, 0.0, 1.0};

/// Unit vector towards a right ascension and declination, degrees.
inline Vec3 direction(double ra_deg, double dec_deg) {
    const double c = std::cos(radians(dec_deg));
    return {c * std::cos(radians(ra_deg)), c * std::sin(radians(ra_deg)),
            std::sin(radians(dec_deg))};
}

}  // namespace straymark::simulate
