#include "camera/geometry.h"

#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <random>

using namespace straymark;

namespace {

constexpr double kDegree = 3.14159265358979323846 / 180.0;

/// Rounding of a few operations on lengths up to 100 mm.
constexpr double kMillimetreRounding = 1e-12;

Telescope telescope_of(double focal_length_mm) {
    Telescope telescope;
    telescope.focal_length_mm = focal_length_mm;
    return telescope;
}

FocalPlane plane_of(int parity, double k1 = 0.0, double k2 = 0.0) {
    FocalPlane plane;
    plane.pixel_um = 15.0;
    plane.parity = parity;
    plane.k1 = k1;
    plane.k2 = k2;
    return plane;
}

Detector detector_of(double rotation_deg, bool flip) {
    Detector detector;
    detector.width = 2048;
    detector.height = 1000;
    detector.centre = {-15.6, 20.0};
    detector.rotation_deg = rotation_deg;
    detector.flip = flip;
    return detector;
}

/// Tangent-plane point at distance t from the boresight in a position angle: north through east.
TangentPoint towards(double position_angle_deg, double t) {
    return {t * std::sin(position_angle_deg * kDegree), t * std::cos(position_angle_deg * kDegree)};
}

void check_at(FocalPoint point, double x_mm, double y_mm) {
    CHECK(point.x_mm == Approx(x_mm).margin(kMillimetreRounding));
    CHECK(point.y_mm == Approx(y_mm).margin(kMillimetreRounding));
}

void check_at(TelescopePoint point, double u_mm, double v_mm) {
    CHECK(point.u_mm == Approx(u_mm).margin(kMillimetreRounding));
    CHECK(point.v_mm == Approx(v_mm).margin(kMillimetreRounding));
}

}  // namespace

TEST_CASE("with north up, east is on the left for parity +1 and on the right for -1") {
    // By hand: 1 mrad at 1000 mm is 1 mm.
    const Telescope telescope = telescope_of(1000.0);
    check_at(focal_from_tangent(telescope, plane_of(1), 0.0, towards(0, 1e-3)), 0.0, 1.0);
    check_at(focal_from_tangent(telescope, plane_of(1), 0.0, towards(90, 1e-3)), -1.0, 0.0);
    check_at(focal_from_tangent(telescope, plane_of(-1), 0.0, towards(0, 1e-3)), 0.0, 1.0);
    check_at(focal_from_tangent(telescope, plane_of(-1), 0.0, towards(90, 1e-3)), 1.0, 0.0);
}

TEST_CASE("the camera angle is the position angle of the focal plane's +y axis") {
    const Telescope telescope = telescope_of(1000.0);
    for (const int parity : {1, -1}) {
        for (const double psi : {0.0, 30.0, 90.0, 200.0, -75.0}) {
            check_at(focal_from_tangent(telescope, plane_of(parity), psi, towards(psi, 1e-3)), 0.0,
                     1.0);
        }
    }
    // With east up, the eye sees north on the right.
    check_at(focal_from_tangent(telescope, plane_of(1), 90.0, towards(0, 1e-3)), 1.0, 0.0);
}

TEST_CASE("the tube's top is the telescope frame's +v, and u lies clockwise of it") {
    const Telescope telescope = telescope_of(1000.0);
    for (const double psi : {0.0, 40.0, 250.0}) {
        for (const double top : {0.0, 77.0, 310.0}) {
            for (const int parity : {1, -1}) {
                const FocalPlane plane = plane_of(parity);
                const auto seen = [&](double position_angle) {
                    const FocalPoint focal =
                        focal_from_tangent(telescope, plane, psi, towards(position_angle, 1e-3));
                    return telescope_from_focal(plane, psi, top, focal);
                };
                check_at(seen(top), 0.0, 1.0);
                // East of the top is to the left for the eye (parity +1), u to the right.
                check_at(seen(top + 90.0), -parity, 0.0);
            }
        }
    }
}

TEST_CASE("without a turn between tube and camera, u and v are x and y") {
    check_at(telescope_from_focal(plane_of(1), 25.0, 25.0, {3.0, -4.0}), 3.0, -4.0);
    // The top at +x (psi 0, parity +1: position angle -90): v is x, u is -y.
    check_at(telescope_from_focal(plane_of(1), 0.0, -90.0, {3.0, -4.0}), 4.0, 3.0);
}

TEST_CASE("a detector lies with its centre on centre_mm and turns counter-clockwise") {
    const FocalPlane plane = plane_of(1);
    // The centre of 2048 x 1000 pixels, 0-based, is (1023.5, 499.5); one pixel is 0.015 mm.
    const DetectorPoint centre{1023.5, 499.5};
    const DetectorPoint right{1024.5, 499.5};
    const DetectorPoint above{1023.5, 500.5};
    check_at(focal_from_detector(plane, detector_of(0, false), centre), -15.6, 20.0);
    check_at(focal_from_detector(plane, detector_of(0, false), right), -15.585, 20.0);
    check_at(focal_from_detector(plane, detector_of(0, false), above), -15.6, 20.015);
    check_at(focal_from_detector(plane, detector_of(90, false), right), -15.6, 20.015);
    check_at(focal_from_detector(plane, detector_of(90, false), above), -15.615, 20.0);
    check_at(focal_from_detector(plane, detector_of(180, false), right), -15.615, 20.0);
    check_at(focal_from_detector(plane, detector_of(-90, false), right), -15.6, 19.985);
    const double diagonal = 0.015 * std::sqrt(0.5);
    check_at(focal_from_detector(plane, detector_of(45, false), right), -15.6 + diagonal,
             20.0 + diagonal);
    // Flipped: X runs the other way, before the turn; Y does not.
    check_at(focal_from_detector(plane, detector_of(0, true), right), -15.615, 20.0);
    check_at(focal_from_detector(plane, detector_of(0, true), above), -15.6, 20.015);
    check_at(focal_from_detector(plane, detector_of(90, true), right), -15.6, 19.985);
    check_at(focal_from_detector(plane, detector_of(90, true), above), -15.615, 20.0);
}

TEST_CASE("quarter turns are exact, so that pixels stay on the pixel grid") {
    const FocalPlane plane = plane_of(1);
    Detector detector = detector_of(90, false);
    detector.centre = {0.0, 0.0};
    for (const double turn : {90.0, -270.0, 450.0}) {
        detector.rotation_deg = turn;
        CHECK(focal_from_detector(plane, detector, {1000.0, 499.5}).x_mm == 0.0);
    }
}

TEST_CASE("distortion stretches along the radius by 1 + k1 t^2 + k2 t^4") {
    const Telescope telescope = telescope_of(1000.0);
    const FocalPlane plane = plane_of(1, 2.0, -3.0);
    // t = 0.1: 1 + 0.02 - 0.0003 = 1.0197; straight along a position angle of 30 degrees.
    const FocalPoint point = focal_from_tangent(telescope, plane, 0.0, towards(30.0, 0.1));
    check_at(point, -101.97 * std::sin(30.0 * kDegree), 101.97 * std::cos(30.0 * kDegree));
}

TEST_CASE("every conversion undoes its reverse") {
    std::mt19937 generator(7);
    std::uniform_real_distribution<double> angle(-360.0, 360.0);
    std::uniform_real_distribution<double> coordinate(-60.0, 60.0);
    std::uniform_real_distribution<double> pixel(-500.0, 2500.0);
    std::uniform_real_distribution<double> coefficient(-30.0, 30.0);
    const Telescope telescope = telescope_of(1500.0);
    constexpr double kTangentRounding = 1e-14;  // promised, rad
    constexpr double kPixelRounding = 1e-9;     // 1e-12 mm of 15 um pixels, with a margin
    for (int trial = 0; trial < 2000; ++trial) {
        const int parity = trial % 2 == 0 ? 1 : -1;
        const FocalPlane plane =
            plane_of(parity, coefficient(generator), 100.0 * coefficient(generator));
        const Detector detector = detector_of(angle(generator), trial % 3 == 0);
        const double psi = angle(generator);
        const double top = angle(generator);

        const DetectorPoint at{pixel(generator), pixel(generator)};
        const DetectorPoint back =
            detector_from_focal(plane, detector, focal_from_detector(plane, detector, at));
        REQUIRE(back.x_px == Approx(at.x_px).margin(kPixelRounding));
        REQUIRE(back.y_px == Approx(at.y_px).margin(kPixelRounding));

        const FocalPoint focal{coordinate(generator), coordinate(generator)};
        const FocalPoint turned_back =
            focal_from_telescope(plane, psi, top, telescope_from_focal(plane, psi, top, focal));
        REQUIRE(turned_back.x_mm == Approx(focal.x_mm).margin(kMillimetreRounding));
        REQUIRE(turned_back.y_mm == Approx(focal.y_mm).margin(kMillimetreRounding));

        const TangentPoint tangent{coordinate(generator) / 1500.0, coordinate(generator) / 1500.0};
        const TangentPoint undistorted = tangent_from_focal(
            telescope, plane, psi, focal_from_tangent(telescope, plane, psi, tangent));
        REQUIRE(undistorted.xi_rad == Approx(tangent.xi_rad).margin(kTangentRounding));
        REQUIRE(undistorted.eta_rad == Approx(tangent.eta_rad).margin(kTangentRounding));
    }
}

TEST_CASE("a star far outside a pincushion's or barrel's reach does not fold into the field") {
    const Telescope telescope = telescope_of(1000.0);
    // 1 - 3 * 30 t^2 = 0 at t = 0.1054: the polynomial turns back at r = 1000 t (1 - 1/3).
    const FocalPlane plane = plane_of(1, -30.0);
    const double turning = 1.0 / std::sqrt(90.0);
    CHECK(distortion_reach_mm(telescope, plane) == Approx(1000.0 * turning * 2.0 / 3.0));
    double before = 0.0;
    for (double t = 0.001; t < 1.5; t *= 1.1) {
        const double r = focal_from_tangent(telescope, plane, 0.0, towards(0.0, t)).y_mm;
        REQUIRE(r > before);
        before = r;
        const TangentPoint back = tangent_from_focal(telescope, plane, 0.0, {0.0, r});
        // Where the slope vanishes, rounding of r (1e-16) moves t by its square root.
        const double rounding = std::abs(t - turning) < 0.01 * turning ? 1e-8 : 1e-13;
        REQUIRE(back.eta_rad == Approx(t).margin(rounding));
    }
}

TEST_CASE("a distortion that always grows reaches for ever") {
    const Telescope telescope = telescope_of(1000.0);
    for (const auto& [k1, k2] : {std::array{0.0, 0.0}, {3.0, 0.0}, {3.0, 5.0}, {-1.0, 10.0}}) {
        CHECK(std::isinf(distortion_reach_mm(telescope, plane_of(1, k1, k2))));
    }
    // 1 + 3 t^2 - 5 t^4 = 0 at t^2 = (3 + sqrt(29)) / 10.
    const double t = std::sqrt((3.0 + std::sqrt(29.0)) / 10.0);
    CHECK(distortion_reach_mm(telescope, plane_of(1, 1.0, -1.0)) ==
          Approx(1000.0 * t * (1.0 + t * t - t * t * t * t)));
}
