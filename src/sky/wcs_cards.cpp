#include <Eigen/Dense>
#include <algorithm>
#include <array>
#include <cmath>
#include <fmt/format.h>
#include <numbers>

#include "camera/geometry.h"
#include "core/error.h"
#include "sky/wcs.h"
#include "sky/wcs_header.h"

// Radial distortion makes SIP simple. With U the undistorted pixel offset from the boresight, u the
// measured one, and t the angle that |U| stands for, u = U (1 + k1 t^2 + k2 t^4) gives AP and BP
// exactly, at order 5; the way back, U = u (1 + c1 |u|^2 + c2 |u|^4 + ...), gives A and B, with the
// c fitted by least squares over the radii that the detector spans.
// Source: Shupe et al. 2005, ASP Conf. Ser. 347, 491 (the SIP convention).

namespace straymark {
namespace {

constexpr double kDegrees = 180.0 / std::numbers::pi;

WcsCard text_card(std::string keyword, std::string text) {
    return {std::move(keyword), true, std::move(text), 0.0};
}
WcsCard number_card(std::string keyword, double number) {
    return {std::move(keyword), false, "", number};
}

/// The linear map from pixels to standard coordinates, distortion left out.
struct LinearSolution {
    DetectorPoint reference;  ///< of the boresight
    Eigen::Matrix2d degrees_per_pixel;
    double radians_per_pixel = 0.0;
};

LinearSolution linear_solution(const Camera& camera, const Pointing& pointing,
                               const Detector& detector) {
    FocalPlane undistorted = camera.focal_plane;
    undistorted.k1 = 0.0;
    undistorted.k2 = 0.0;
    const auto tangent = [&](double x, double y) {
        const TangentPoint point =
            tangent_from_focal(camera.telescope, undistorted, pointing.psi_deg,
                               focal_from_detector(undistorted, detector, {x, y}));
        return Eigen::Vector2d(point.xi_rad, point.eta_rad);
    };
    const double width = detector.width;
    const double height = detector.height;
    const Eigen::Vector2d origin = tangent(0.0, 0.0);
    Eigen::Matrix2d radians_per_pixel;
    radians_per_pixel.col(0) = (tangent(width, 0.0) - origin) / width;
    radians_per_pixel.col(1) = (tangent(0.0, height) - origin) / height;
    return {detector_from_focal(undistorted, detector, {0.0, 0.0}), kDegrees * radians_per_pixel,
            std::sqrt(std::abs(radians_per_pixel.determinant()))};
}

/// Nearest and farthest distance of the detector's pixels from a point, pixels.
std::pair<double, double> radii_spanned(const Detector& detector, DetectorPoint from) {
    const double x_near = std::clamp(from.x_px, -0.5, detector.width - 0.5);
    const double y_near = std::clamp(from.y_px, -0.5, detector.height - 0.5);
    const double x_far = std::max(from.x_px + 0.5, detector.width - 0.5 - from.x_px);
    const double y_far = std::max(from.y_px + 0.5, detector.height - 0.5 - from.y_px);
    return {std::hypot(x_near - from.x_px, y_near - from.y_px), std::hypot(x_far, y_far)};
}

/// c1, c2, ... of U = u (1 + c1 |u|^2 + c2 |u|^4 + ...), in powers of pixels.
Eigen::VectorXd undistorting_coefficients(const Camera& camera, const LinearSolution& linear,
                                          std::pair<double, double> radii) {
    constexpr int kSamples = 200;
    constexpr int kMostTerms = 4;  // SIP ends at order 9
    constexpr double kAccuracy_px = 0.002;
    const double scale = radii.second;
    Eigen::VectorXd measured(kSamples);
    Eigen::VectorXd wanted(kSamples);  // U - u
    for (int i = 0; i < kSamples; ++i) {
        const double along = (i + 0.5) / kSamples;
        measured(i) = radii.first + along * (radii.second - radii.first);
        const double radius_mm =
            measured(i) * linear.radians_per_pixel * camera.telescope.focal_length_mm;
        const TangentPoint tangent =
            tangent_from_focal(camera.telescope, camera.focal_plane, 0.0, {0.0, radius_mm});
        wanted(i) =
            std::hypot(tangent.xi_rad, tangent.eta_rad) / linear.radians_per_pixel - measured(i);
    }
    for (int terms = 1; terms <= kMostTerms; ++terms) {
        Eigen::MatrixXd basis(kSamples, terms);
        for (int n = 0; n < terms; ++n) {
            basis.col(n) = (measured / scale).array().pow(2 * n + 3);
        }
        Eigen::VectorXd c = basis.colPivHouseholderQr().solve(wanted);
        if ((basis * c - wanted).cwiseAbs().maxCoeff() < kAccuracy_px) {
            for (int n = 0; n < terms; ++n) {
                c(n) /= std::pow(scale, 2 * n + 3);
            }
            return c;
        }
    }
    throw InputError({camera.path, "focal_plane.distortion",
                      fmt::format("k1 {}, k2 {}", camera.focal_plane.k1, camera.focal_plane.k2),
                      fmt::format("a distortion that a polynomial of order {} holds to {} px",
                                  2 * kMostTerms + 1, kAccuracy_px),
                      "check the sign and the unit (t is in radians)"});
}

double binomial(int n, int k) {
    double out = 1.0;
    for (int i = 1; i <= k; ++i) {
        out = out * (n - k + i) / i;
    }
    return out;
}

/// Cards of x and y times sum_n c_n (x^2 + y^2)^n, n from 1.
void add_radial_polynomial(std::vector<WcsCard>& cards, const std::string& first,
                           const std::string& second, const Eigen::VectorXd& c) {
    const double order = 2.0 * static_cast<double>(c.size()) + 1.0;
    for (const auto& [name, along_x] : {std::pair(first, true), std::pair(second, false)}) {
        cards.push_back(number_card(name + "_ORDER", order));
        for (int n = 1; n <= c.size(); ++n) {
            for (int k = 0; k <= n; ++k) {
                const int p = 2 * k + (along_x ? 1 : 0);
                const int q = 2 * (n - k) + (along_x ? 0 : 1);
                cards.push_back(
                    number_card(fmt::format("{}_{}_{}", name, p, q), c(n - 1) * binomial(n, k)));
            }
        }
    }
}

}  // namespace

std::vector<std::string> wcs_cards(const Camera& camera, const Pointing& pointing, int detector) {
    const Detector& device = camera.detectors[static_cast<std::size_t>(detector)];
    const LinearSolution linear = linear_solution(camera, pointing, device);
    const bool distorted = camera.focal_plane.k1 != 0.0 || camera.focal_plane.k2 != 0.0;
    const std::string suffix = distorted ? "-SIP" : "";
    std::vector<WcsCard> cards{
        number_card("WCSAXES", 2),
        text_card("CTYPE1", "RA---TAN" + suffix),
        text_card("CTYPE2", "DEC--TAN" + suffix),
        text_card("CUNIT1", "deg"),
        text_card("CUNIT2", "deg"),
        number_card("CRVAL1", pointing.boresight.ra_deg),
        number_card("CRVAL2", pointing.boresight.dec_deg),
        number_card("CRPIX1", linear.reference.x_px + 1.0),
        number_card("CRPIX2", linear.reference.y_px + 1.0),
        number_card("CD1_1", linear.degrees_per_pixel(0, 0)),
        number_card("CD1_2", linear.degrees_per_pixel(0, 1)),
        number_card("CD2_1", linear.degrees_per_pixel(1, 0)),
        number_card("CD2_2", linear.degrees_per_pixel(1, 1)),
        text_card("RADESYS", "ICRS"),
    };
    if (distorted) {
        add_radial_polynomial(
            cards, "A", "B",
            undistorting_coefficients(camera, linear, radii_spanned(device, linear.reference)));
        const double t2 = linear.radians_per_pixel * linear.radians_per_pixel;
        add_radial_polynomial(
            cards, "AP", "BP",
            Eigen::Vector2d(camera.focal_plane.k1 * t2, camera.focal_plane.k2 * t2 * t2));
    }
    std::vector<std::string> out;
    out.reserve(cards.size());
    std::transform(cards.begin(), cards.end(), std::back_inserter(out), fits_card);
    return out;
}

}  // namespace straymark
