#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <limits>
#include <memory>
#include <random>

#include "exposure/measure.h"
#include "sky/projection.h"

using namespace straymark;

namespace {

constexpr double kRadians = M_PI / 180.0;
constexpr double kPixelArcsec = 0.015 / 8280.0 / kRadians * 3600.0;
constexpr MjdUtc kMiddle{61041.3};

/// A list kept in memory.
class ListInMemory final : public StarList {
public:
    std::vector<Star> stars;
    double covered = 1.0;

    [[nodiscard]] std::vector<Star> within(SkyPoint centre, double radius_deg,
                                           const std::string& /*filter*/,
                                           double faintest) const override {
        std::vector<Star> out;
        const bool all = std::isinf(faintest);
        for (const Star& star : stars) {
            if (separation_deg(centre, star.position) <= radius_deg &&
                (all || star.mag < faintest)) {
                out.push_back(star);
            }
        }
        std::stable_sort(out.begin(), out.end(),
                         [](const Star& a, const Star& b) { return a.mag < b.mag; });
        return out;
    }
    [[nodiscard]] double coverage(SkyPoint /*centre*/, double /*radius_deg*/) const override {
        return covered;
    }
    [[nodiscard]] std::string digest() const override { return "in memory"; }
    [[nodiscard]] std::int64_t size() const override {
        return static_cast<std::int64_t>(stars.size());
    }
};

/// Four detectors of 2048 x 2048, 0.37 arcsec pixels.
Camera four_detectors(int parity) {
    Camera camera;
    camera.observatory = {31.2, -110.4, 2120.0};
    camera.telescope.focal_length_mm = 8280.0;
    camera.focal_plane.pixel_um = 15.0;
    camera.focal_plane.parity = parity;
    camera.filters["r"] = {622.0, 138.0, 25.9, 0.0};
    for (int i = 0; i < 4; ++i) {
        Detector detector;
        detector.id = "d" + std::to_string(i + 1);
        detector.width = 2048;
        detector.height = 2048;
        detector.centre = {i % 2 == 0 ? -15.6 : 15.6, i / 2 == 0 ? -15.6 : 15.6};
        detector.rotation_deg = 90.0 * i;
        detector.flip = i == 2;
        camera.detectors.push_back(detector);
    }
    return camera;
}

using Vector = std::array<double, 3>;

Vector direction(SkyPoint point) {
    const double ra = point.ra_deg * kRadians;
    const double dec = point.dec_deg * kRadians;
    return {std::cos(dec) * std::cos(ra), std::cos(dec) * std::sin(ra), std::sin(dec)};
}
double dot(const Vector& a, const Vector& b) {
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2];
}

/// Where a star falls on one detector, by vectors: nothing of the camera's own code.
DetectorPoint image(const Camera& camera, const Detector& detector, SkyPoint boresight,
                    double psi_deg, SkyPoint star) {
    const Vector ahead = direction(boresight);
    const Vector east = direction({boresight.ra_deg + 90.0, 0.0});
    const Vector north = direction({boresight.ra_deg, boresight.dec_deg + 90.0});
    const Vector s = direction(star);
    const double xi = dot(s, east) / dot(s, ahead);
    const double eta = dot(s, north) / dot(s, ahead);
    const double psi = psi_deg * kRadians;
    const double up = camera.telescope.focal_length_mm * (eta * std::cos(psi) + xi * std::sin(psi));
    const double right = camera.focal_plane.parity * camera.telescope.focal_length_mm *
                         (eta * std::sin(psi) - xi * std::cos(psi));
    const double turn = detector.rotation_deg * kRadians;
    const double dx = (right - detector.centre.x_mm) / 0.015;
    const double dy = (up - detector.centre.y_mm) / 0.015;
    const double x = std::cos(turn) * dx + std::sin(turn) * dy;
    const double y = -std::sin(turn) * dx + std::cos(turn) * dy;
    return {1023.5 + (detector.flip ? -x : x), 1023.5 + y};
}

SkyPoint offset(SkyPoint from, double east_arcsec, double north_arcsec) {
    return sky_from_tangent(from,
                            {east_arcsec / 3600.0 * kRadians, north_arcsec / 3600.0 * kRadians});
}

/// What a scene is made of.
struct Recipe {
    SkyPoint boresight{150.0, 20.0};
    double psi_deg = 33.0;
    double east_arcsec = 0.0;  ///< true boresight from the header's
    double north_arcsec = 0.0;
    double turn_deg = 0.0;  ///< true camera angle minus the header's
    int parity = 1;
    int listed = 400;
    double missing = 0.3;   ///< listed stars that were not measured
    double spurious = 0.3;  ///< measured ones that are none, per listed one
    double noise_px = 0.1;
    double transparency = 1.0;
    double pm_north_mas_yr = 0.0;
    unsigned seed = 1;
};

struct Scene {
    Camera camera;
    std::unique_ptr<ListInMemory> list = std::make_unique<ListInMemory>();
    ExposureDigest digest;
    SkyPoint true_boresight;
    double true_psi_deg = 0.0;
};

/// Magnitudes 12 to 20; of those brighter than 14 the detectors are saturated.
Scene scene_of(const Recipe& recipe) {
    Scene scene;
    scene.camera = four_detectors(recipe.parity);
    scene.true_boresight = offset(recipe.boresight, recipe.east_arcsec, recipe.north_arcsec);
    // The header's angle counts from north at the header's boresight, which near the pole is not
    // north at the true one.
    const double north_turned = position_angle_deg(recipe.boresight, scene.true_boresight) -
                                position_angle_deg(scene.true_boresight, recipe.boresight) + 180.0;
    const bool shifted = recipe.east_arcsec != 0.0 || recipe.north_arcsec != 0.0;
    scene.true_psi_deg = recipe.psi_deg + recipe.turn_deg - (shifted ? north_turned : 0.0);
    scene.digest.header.boresight = recipe.boresight;
    scene.digest.header.psi_deg = recipe.psi_deg;
    scene.digest.header.filter = "r";
    scene.digest.header.exposure_s = 30.0;
    scene.digest.header.start = {kMiddle.days - 15.0 / kSecondsPerDay};
    scene.digest.header.end = {kMiddle.days + 15.0 / kSecondsPerDay};
    scene.digest.detectors.resize(4);

    std::mt19937 random(recipe.seed);
    std::uniform_real_distribution<double> unit(0.0, 1.0);
    std::normal_distribution<double> normal(0.0, recipe.noise_px);
    const auto measure = [&](std::size_t d, DetectorPoint at, double flux_e) {
        if (at.x_px > 0.0 && at.x_px < 2047.0 && at.y_px > 0.0 && at.y_px < 2047.0) {
            scene.digest.detectors[d].stars.push_back(
                {at, static_cast<float>(flux_e), 10.0F, 0.1F});
        }
    };
    for (int i = 0; i < recipe.listed; ++i) {
        Star star;
        star.id = std::to_string(i);
        star.mag = 12.0 + 8.0 * std::sqrt(unit(random));
        const SkyPoint now = offset(scene.true_boresight, 1700.0 * (unit(random) - 0.5),
                                    1700.0 * (unit(random) - 0.5));
        star.pm_dec_mas_yr = recipe.pm_north_mas_yr;
        // 26.005 years from J2000 to 2026-01-01.3
        star.position = {now.ra_deg, now.dec_deg - 26.005 * recipe.pm_north_mas_yr / 3.6e6};
        scene.list->stars.push_back(star);
        if (star.mag < 14.0 || unit(random) < recipe.missing) {
            continue;
        }
        const double flux_e = 30.0 * recipe.transparency * std::pow(10.0, 0.4 * (25.9 - star.mag));
        for (std::size_t d = 0; d < 4; ++d) {
            const DetectorPoint at = image(scene.camera, scene.camera.detectors[d],
                                           scene.true_boresight, scene.true_psi_deg, now);
            measure(d, {at.x_px + normal(random), at.y_px + normal(random)}, flux_e);
        }
    }
    for (int i = 0; i < recipe.spurious * recipe.listed; ++i) {
        measure(static_cast<std::size_t>(i % 4), {2047.0 * unit(random), 2047.0 * unit(random)},
                std::pow(10.0, 3.0 + 3.0 * unit(random)));
    }
    return scene;
}

void check_found(const Scene& scene, const Recipe& recipe) {
    const Pointing& pointing = scene.digest.pointing;
    INFO(pointing.reason);
    REQUIRE(pointing.refined);
    // More than 100 matches of noise_px each: the mean is good to a tenth of it, the angle to a
    // tenth of it over some 1000 px; five times that.
    const double shift_px = 0.5 * recipe.noise_px + 1e-3;
    const double turn_deg = 0.5 * recipe.noise_px / 1000.0 / kRadians + 1e-5;
    CHECK(pointing.matched_stars > 100);
    CHECK(separation_deg(pointing.boresight, scene.true_boresight) * 3600.0 <
          shift_px * kPixelArcsec);
    // Compared where both have the same north.
    CHECK(std::abs(std::remainder(pointing.psi_deg - scene.true_psi_deg, 360.0)) <
          turn_deg / std::cos(recipe.boresight.dec_deg * kRadians));
    CHECK(pointing.residual_px == Approx(recipe.noise_px).epsilon(0.25).margin(2e-3));
    CHECK(pointing.shift_arcsec ==
          Approx(std::hypot(recipe.east_arcsec, recipe.north_arcsec)).margin(0.1));
    CHECK(pointing.reason.empty());
}

}  // namespace

TEST_CASE("Shift and turn are found among missing and false stars") {
    Recipe recipe;
    for (const auto& [east, north, turn] :
         {std::array{0.0, 0.0, 0.0}, {60.0, 0.0, 0.5}, {-42.0, 42.0, -0.5}, {5.0, -60.0, 0.2}}) {
        recipe.east_arcsec = east;
        recipe.north_arcsec = north;
        recipe.turn_deg = turn;
        ++recipe.seed;
        Scene scene = scene_of(recipe);
        refine_pointing(scene.camera, scene.list.get(), scene.digest);
        check_found(scene, recipe);
        CHECK(scene.digest.pointing.turn_deg == Approx(turn).margin(0.02));
    }
}

TEST_CASE("A mirrored camera, RA 0 and the neighbourhood of the pole make no difference") {
    for (const SkyPoint boresight : {SkyPoint{0.001, -40.0}, {359.9995, 0.0}, {77.0, 88.5}}) {
        for (const int parity : {1, -1}) {
            Recipe recipe;
            recipe.boresight = boresight;
            recipe.parity = parity;
            recipe.east_arcsec = -40.0;
            recipe.north_arcsec = 30.0;
            recipe.turn_deg = 0.4;
            recipe.psi_deg = 359.9;
            Scene scene = scene_of(recipe);
            refine_pointing(scene.camera, scene.list.get(), scene.digest);
            check_found(scene, recipe);
        }
    }
}

TEST_CASE("Listed stars are taken where they are in mid-exposure") {
    Recipe recipe;
    recipe.pm_north_mas_yr = 400.0;  // 10 arcsec since J2000
    Scene scene = scene_of(recipe);
    refine_pointing(scene.camera, scene.list.get(), scene.digest);
    check_found(scene, recipe);
}

TEST_CASE("The sky of another field is never taken for this one") {
    Recipe recipe;
    for (unsigned seed = 100; seed < 200; ++seed) {
        recipe.seed = seed;
        recipe.listed = seed % 2 == 0 ? 400 : 40;
        Scene scene = scene_of(recipe);
        recipe.seed = seed + 1000;
        const Scene other = scene_of(recipe);
        refine_pointing(scene.camera, other.list.get(), scene.digest);
        CHECK_FALSE(scene.digest.pointing.refined);
        CHECK_THAT(scene.digest.pointing.reason, Catch::Contains("chance"));
        CHECK(scene.digest.pointing.boresight.ra_deg == recipe.boresight.ra_deg);
        CHECK(scene.digest.pointing.psi_deg == recipe.psi_deg);
        CHECK(scene.digest.transparency == 1.0);
    }
}

TEST_CASE("A handful of stars is enough, where the sky is empty otherwise") {
    Recipe recipe;
    recipe.listed = 20;
    recipe.missing = 0.0;
    recipe.spurious = 0.1;
    recipe.east_arcsec = 30.0;
    recipe.turn_deg = -0.3;
    Scene scene = scene_of(recipe);
    refine_pointing(scene.camera, scene.list.get(), scene.digest);
    INFO(scene.digest.pointing.reason);
    REQUIRE(scene.digest.pointing.refined);
    // At least 5 stars of 0.1 px.
    CHECK(separation_deg(scene.digest.pointing.boresight, scene.true_boresight) * 3600.0 <
          0.2 * kPixelArcsec);
}

TEST_CASE("A header's coordinate system that fits is taken, however wrong the header's pointing") {
    Recipe recipe;
    Scene scene = scene_of(recipe);
    const Pointing truth{scene.true_boresight, scene.true_psi_deg, false, 0, 0.0, 0.0, 0.0, ""};
    for (std::size_t d = 0; d < 4; ++d) {
        scene.digest.detectors[d].header_wcs = wcs_cards(scene.camera, truth, static_cast<int>(d));
    }
    scene.digest.header.boresight = {152.0, 21.0};
    scene.digest.header.psi_deg = 123.0;
    refine_pointing(scene.camera, scene.list.get(), scene.digest);
    REQUIRE(scene.digest.pointing.refined);
    CHECK(separation_deg(scene.digest.pointing.boresight, scene.true_boresight) * 3600.0 <
          0.05 * kPixelArcsec);
    CHECK(scene.digest.pointing.shift_arcsec > 3600.0);
}

TEST_CASE("A header's coordinate system that does not fit, or cannot be read, is passed over") {
    Recipe recipe;
    recipe.east_arcsec = 20.0;
    for (const bool readable : {true, false}) {
        Scene scene = scene_of(recipe);
        Pointing wrong{offset(recipe.boresight, 200.0, 0.0), 40.0, false, 0, 0.0, 0.0, 0.0, ""};
        scene.digest.detectors[1].header_wcs = wcs_cards(scene.camera, wrong, 1);
        if (!readable) {
            scene.digest.detectors[1].header_wcs[1].replace(10, 10, "'RA---TNX'");
        }
        refine_pointing(scene.camera, scene.list.get(), scene.digest);
        check_found(scene, recipe);
    }
}

TEST_CASE("The stars' fluxes give the transparency") {
    Recipe recipe;
    recipe.transparency = 0.6;
    Scene scene = scene_of(recipe);
    refine_pointing(scene.camera, scene.list.get(), scene.digest);
    REQUIRE(scene.digest.pointing.refined);
    // False stars at matched places are few: a median.
    CHECK(scene.digest.transparency == Approx(0.6).epsilon(1e-3));
    // With 0.3 magnitudes an airmass the same fluxes mean clearer air, by the plane-parallel
    // airmass 1 / sin(altitude), good to 0.1 per cent high in the sky.
    const double altitude =
        horizontal_from_sky(scene.camera.observatory, recipe.boresight, kMiddle).altitude_deg;
    REQUIRE(altitude > 30.0);
    scene.camera.filters["r"].extinction = 0.3;
    refine_pointing(scene.camera, scene.list.get(), scene.digest);
    CHECK(scene.digest.transparency ==
          Approx(0.6 * std::pow(10.0, 0.4 * 0.3 * (1.0 / std::sin(altitude * kRadians) - 1.0)))
              .epsilon(2e-3));
}

TEST_CASE("Without a magnitude in this filter positions are still refined") {
    Scene scene = scene_of({});
    for (Star& star : scene.list->stars) {
        star.mag = std::numeric_limits<double>::quiet_NaN();
    }
    refine_pointing(scene.camera, scene.list.get(), scene.digest);
    CHECK(scene.digest.pointing.refined);
    CHECK(scene.digest.transparency == 1.0);
}

TEST_CASE("Why a pointing is not refined is said") {
    Scene scene = scene_of({});
    const auto reason = [&scene](const StarList* list) {
        refine_pointing(scene.camera, list, scene.digest);
        CHECK_FALSE(scene.digest.pointing.refined);
        return scene.digest.pointing.reason;
    };
    CHECK(reason(nullptr) == "no star list");
    ListInMemory empty;
    CHECK_THAT(reason(&empty), Catch::Contains("0 listed stars on the detectors"));
    empty.covered = 0.0;
    CHECK(reason(&empty) == "the star list does not cover this field");
    for (DetectorDigest& detector : scene.digest.detectors) {
        detector.stars.resize(std::min<std::size_t>(detector.stars.size(), 1));
    }
    CHECK(reason(scene.list.get()) == "4 stars measured, fewer than 5");
}
