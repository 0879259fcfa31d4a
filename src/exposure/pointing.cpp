#include <algorithm>
#include <cmath>
#include <fmt/format.h>
#include <limits>
#include <numbers>
#include <numeric>
#include <optional>
#include <string>
#include <utility>
#include <vector>

#include "camera/geometry.h"
#include "core/error.h"
#include "core/robust.h"
#include "exposure/measure.h"
#include "exposure/star_flux.h"
#include "exposure/star_match.h"
#include "sky/projection.h"

namespace straymark {
namespace {

constexpr double kRadians = std::numbers::pi / 180.0;
constexpr double kArcsecPerDegree = 3600.0;

/// How far the header may be off: telescopes point to some tens of arcseconds, rotators to some
/// tenths of a degree.
constexpr double kMostShift_arcsec = 75.0;
constexpr double kMostTurn_deg = 0.6;
constexpr double kVoteBin_px = 4.0;

constexpr int kFewestMatches = 5;
/// A match that chance would bring about more often than this is none: a survey of a million
/// exposures sees one by accident.
const double kLogChanceAllowed = std::log(1e-6);
/// A header's coordinate system with residuals below this fits.
constexpr double kFittingWcs_px = 1.0;

constexpr std::size_t kMostMeasured = 2000;
constexpr std::size_t kMostListed = 20000;
constexpr std::size_t kMostMeasuredVoters = 200;

struct ListedStar {
    SkyPoint position;  ///< in mid-exposure
    double mag = 0.0;
};

/// What was measured, brightest first, on the focal plane of all detectors together.
struct MeasuredField {
    std::vector<FocalPoint> places;
    std::vector<double> flux_e;
    std::vector<int> detectors;  ///< that have stars
    double area_mm2 = 0.0;
    double radius_deg = 0.0;  ///< of their farthest corner from the boresight
};

double pixel_mm(const Camera& camera) {
    return 1e-3 * camera.focal_plane.pixel_um;
}

double corner_distance_deg(const Camera& camera, const Detector& detector) {
    double farthest = 0.0;
    for (const double x : {-0.5, detector.width - 0.5}) {
        for (const double y : {-0.5, detector.height - 0.5}) {
            const TangentPoint corner =
                tangent_from_focal(camera.telescope, camera.focal_plane, 0.0,
                                   focal_from_detector(camera.focal_plane, detector, {x, y}));
            farthest = std::max(farthest, std::hypot(corner.xi_rad, corner.eta_rad));
        }
    }
    return std::atan(farthest) / kRadians;
}

MeasuredField measured_field(const Camera& camera, const ExposureDigest& digest) {
    MeasuredField field;
    struct Star {
        double flux_e = 0.0;
        FocalPoint place;
    };
    std::vector<Star> stars;
    for (std::size_t d = 0; d < digest.detectors.size(); ++d) {
        const Detector& detector = camera.detectors[d];
        for (const MeasuredStar& star : digest.detectors[d].stars) {
            stars.push_back({static_cast<double>(star.flux_e),
                             focal_from_detector(camera.focal_plane, detector, star.position)});
        }
        if (!digest.detectors[d].stars.empty()) {
            field.detectors.push_back(static_cast<int>(d));
            field.area_mm2 += static_cast<double>(detector.width) * detector.height *
                              pixel_mm(camera) * pixel_mm(camera);
            field.radius_deg = std::max(field.radius_deg, corner_distance_deg(camera, detector));
        }
    }
    std::stable_sort(stars.begin(), stars.end(),
                     [](const Star& a, const Star& b) { return a.flux_e > b.flux_e; });
    stars.resize(std::min(stars.size(), kMostMeasured));
    for (const Star& star : stars) {
        field.places.push_back(star.place);
        field.flux_e.push_back(star.flux_e);
    }
    return field;
}

std::optional<FocalPoint> focal_from_sky(const Camera& camera, const Pointing& pointing,
                                         SkyPoint point) {
    const auto tangent = tangent_from_sky(pointing.boresight, point);
    if (!tangent) {
        return std::nullopt;
    }
    return focal_from_tangent(camera.telescope, camera.focal_plane, pointing.psi_deg, *tangent);
}

SkyPoint sky_from_focal(const Camera& camera, const Pointing& pointing, FocalPoint point) {
    return sky_from_tangent(
        pointing.boresight,
        tangent_from_focal(camera.telescope, camera.focal_plane, pointing.psi_deg, point));
}

/// The pointing under which every star lies where `motion` takes it under this one: the new
/// boresight is seen at the origin, the new +y axis where `motion` turns it.
Pointing moved(const Camera& camera, const Pointing& pointing, const PlaneMotion& motion) {
    const double along_y_mm = 1e-4 * camera.telescope.focal_length_mm;
    const SkyPoint boresight = sky_from_focal(camera, pointing, motion.undone({0.0, 0.0}));
    const SkyPoint above = sky_from_focal(camera, pointing, motion.undone({0.0, along_y_mm}));
    Pointing out = pointing;
    out.boresight = boresight;
    out.psi_deg = position_angle_deg(boresight, above);
    return out;
}

/// Stars and listed ones paired under some pointing.
struct Match {
    Pointing pointing;
    std::vector<StarPair> pairs;
    double scatter_mm = 0.0;  ///< of the pairs, per axis, robust
    double radius_mm = 0.0;   ///< within which pairs were taken
    double motions = 1.0;     ///< tried to get here
};

/// Matches one exposure's stars with a star list.
class PointingSearch {
public:
    PointingSearch(const Camera& camera, const StarList& stars, const ExposureDigest& digest)
        : camera_(camera), stars_(stars), header_(digest.header) {
        field_ = measured_field(camera, digest);
        zero_flux_e_ = zero_magnitude_flux_e(camera, digest.header);
    }

    [[nodiscard]] const MeasuredField& field() const { return field_; }
    [[nodiscard]] const std::vector<ListedStar>& listed() const { return listed_; }
    [[nodiscard]] double covered() const { return covered_; }

    /// From a pointing that is right to a few pixels.
    std::optional<Match> near(const Pointing& start) {
        list_stars(start);
        return refined(start, 2.0 * kVoteBin_px, 1.0);
    }

    /// From a pointing that may be off by the full range.
    std::optional<Match> around(const Pointing& start) {
        list_stars(start);
        const std::vector<FocalPoint> places = expected(start);
        const auto measured =
            std::span(field_.places).first(std::min(field_.places.size(), kMostMeasuredVoters));
        // The brightest listed stars are saturated and not among the measured ones.
        const auto bright =
            std::span(places).first(std::min(places.size(), 3 * measured.size() + 100));
        const MotionRange range{shift_mm(), kMostTurn_deg * kRadians,
                                kVoteBin_px * pixel_mm(camera_)};
        const auto motion = voted_motion(measured, bright, range);
        if (!motion) {
            return std::nullopt;
        }
        return refined(moved(camera_, start, *motion), 2.0 * kVoteBin_px,
                       motions_tried(bright, range));
    }

    /// Could chance have made this match?
    [[nodiscard]] bool convincing(const Match& match) const {
        return static_cast<int>(match.pairs.size()) >= kFewestMatches &&
               log_chance(static_cast<int>(match.pairs.size()), expected_by_chance(match)) +
                       std::log(match.motions) <
                   kLogChanceAllowed;
    }
    [[nodiscard]] double expected_by_chance(const Match& match) const {
        return static_cast<double>(field_.places.size()) * static_cast<double>(listed_.size()) *
               std::numbers::pi * match.radius_mm * match.radius_mm / field_.area_mm2;
    }

    /// Median ratio of measured to listed flux; nothing where too few stars have a magnitude.
    [[nodiscard]] std::optional<double> transparency(const Match& match) const {
        std::vector<double> ratios;
        for (const StarPair& pair : match.pairs) {
            const double mag = listed_[static_cast<std::size_t>(pair.expected)].mag;
            const double flux_e = field_.flux_e[static_cast<std::size_t>(pair.measured)];
            if (zero_flux_e_ && std::isfinite(mag) && flux_e > 0.0) {
                ratios.push_back(flux_e / (*zero_flux_e_ * std::pow(10.0, -0.4 * mag)));
            }
        }
        if (static_cast<int>(ratios.size()) < kFewestMatches) {
            return std::nullopt;
        }
        return median_in_place(std::span(ratios));
    }

private:
    [[nodiscard]] double shift_mm() const {
        return camera_.telescope.focal_length_mm *
               std::tan(kMostShift_arcsec / kArcsecPerDegree * kRadians);
    }

    /// The listed stars that may lie on detectors with stars, brightest first.
    void list_stars(const Pointing& start) {
        const double radius_deg = field_.radius_deg + kMostShift_arcsec / kArcsecPerDegree;
        covered_ = stars_.coverage(start.boresight, radius_deg);
        listed_.clear();
        constexpr double kAll = std::numeric_limits<double>::infinity();
        for (const double faintest : {faintest_useful(), kAll}) {
            if (static_cast<int>(listed_.size()) < kFewestMatches) {
                add_listed(start, radius_deg, faintest);
            }
        }
    }

    void add_listed(const Pointing& start, double radius_deg, double faintest) {
        listed_.clear();
        for (const Star& star :
             stars_.within(start.boresight, radius_deg, header_.filter, faintest)) {
            const SkyPoint position = propagated(star, header_.middle());
            const auto place = focal_from_sky(camera_, start, position);
            if (place && on_detectors(*place) && listed_.size() < kMostListed) {
                listed_.push_back({position, star.mag});
            }
        }
    }

    /// Somewhat fainter than the faintest measured star.
    [[nodiscard]] double faintest_useful() const {
        constexpr double kMargin_mag = 1.5;
        if (!zero_flux_e_ || field_.flux_e.empty() || field_.flux_e.back() <= 0.0) {
            return std::numeric_limits<double>::infinity();
        }
        return kMargin_mag - 2.5 * std::log10(field_.flux_e.back() / *zero_flux_e_);
    }

    [[nodiscard]] bool on_detectors(FocalPoint place) const {
        const double margin_px = shift_mm() / pixel_mm(camera_);
        return std::any_of(field_.detectors.begin(), field_.detectors.end(), [&](int index) {
            const Detector& detector = camera_.detectors[static_cast<std::size_t>(index)];
            const DetectorPoint point = detector_from_focal(camera_.focal_plane, detector, place);
            return point.x_px > -margin_px && point.x_px < detector.width + margin_px &&
                   point.y_px > -margin_px && point.y_px < detector.height + margin_px;
        });
    }

    /// Where the listed stars are under a pointing, in their order.
    [[nodiscard]] std::vector<FocalPoint> expected(const Pointing& pointing) const {
        constexpr double kNowhere = 1e6;  // mm: a kilometre off the focal plane
        std::vector<FocalPoint> places;
        places.reserve(listed_.size());
        for (const ListedStar& star : listed_) {
            places.push_back(focal_from_sky(camera_, pointing, star.position)
                                 .value_or(FocalPoint{kNowhere, kNowhere}));
        }
        return places;
    }

    /// Least squares with ever narrower limits, until nothing changes.
    [[nodiscard]] std::optional<Match> refined(const Pointing& start, double radius_px,
                                               double motions) const {
        constexpr int kMostRounds = 20;
        constexpr double kSettled_px = 1e-4;
        constexpr double kNarrowest_px = 1.5;
        constexpr double kOutlier = 4.0;  // times the scatter
        Match match{start, {}, 0.0, radius_px * pixel_mm(camera_), motions};
        for (int round = 0; round < kMostRounds; ++round) {
            const std::vector<FocalPoint> places = expected(match.pointing);
            match.pairs = nearest_pairs(field_.places, places, match.radius_mm);
            if (match.pairs.size() < 2) {
                return std::nullopt;
            }
            const PlaneMotion motion = fitted_motion(field_.places, places, match.pairs);
            const double before_mm = match.radius_mm;
            match.scatter_mm = scatter_after(motion, places, match.pairs);
            match.pointing = moved(camera_, match.pointing, motion);
            match.radius_mm = std::clamp(kOutlier * match.scatter_mm,
                                         kNarrowest_px * pixel_mm(camera_), before_mm);
            if (std::hypot(motion.dx_mm, motion.dy_mm) < kSettled_px * pixel_mm(camera_) &&
                match.radius_mm == before_mm) {
                break;
            }
        }
        return match;
    }

    /// Standard deviation per axis; a distance's median is 1.1774 of it (Rayleigh).
    [[nodiscard]] double scatter_after(const PlaneMotion& motion,
                                       const std::vector<FocalPoint>& places,
                                       const std::vector<StarPair>& pairs) const {
        std::vector<double> distances;
        for (const StarPair& pair : pairs) {
            const FocalPoint at = motion.applied(places[static_cast<std::size_t>(pair.expected)]);
            const FocalPoint& star = field_.places[static_cast<std::size_t>(pair.measured)];
            distances.push_back(std::hypot(star.x_mm - at.x_mm, star.y_mm - at.y_mm));
        }
        return median_in_place(std::span(distances)) / 1.1774100225154747;
    }

    const Camera& camera_;
    const StarList& stars_;
    const ExposureHeader& header_;
    MeasuredField field_;
    std::optional<double> zero_flux_e_;
    std::vector<ListedStar> listed_;
    double covered_ = 0.0;
};

/// The pointing that agrees best with the coordinate systems in the raw headers; nothing where
/// there is none that can be used.
std::optional<Pointing> pointing_from_wcs(const Camera& camera, const ExposureDigest& digest) {
    constexpr int kPlaces = 5;  // along each side of a detector
    constexpr int kRounds = 6;  // each leaves the square of the error before
    std::vector<FocalPoint> places;
    std::vector<SkyPoint> sky;
    for (std::size_t d = 0; d < digest.detectors.size(); ++d) {
        const std::vector<std::string>& cards = digest.detectors[d].header_wcs;
        if (!Wcs::present(cards)) {
            continue;
        }
        const Detector& detector = camera.detectors[d];
        const Wcs wcs(cards, digest.detectors[d].raw_file, "WCS of " + detector.id);
        for (int i = 0; i < kPlaces * kPlaces; ++i) {
            const int column = i % kPlaces;
            const int row = i / kPlaces;
            const DetectorPoint point{column * (detector.width - 1.0) / (kPlaces - 1),
                                      row * (detector.height - 1.0) / (kPlaces - 1)};
            places.push_back(focal_from_detector(camera.focal_plane, detector, point));
            sky.push_back(wcs.sky_from_detector(point));
        }
    }
    if (places.empty()) {
        return std::nullopt;
    }
    Pointing pointing = digest.pointing;
    std::vector<StarPair> pairs(places.size());
    for (std::size_t i = 0; i < pairs.size(); ++i) {
        pairs[i] = {static_cast<int>(i), static_cast<int>(i), 0.0};
    }
    for (int round = 0; round < kRounds; ++round) {
        std::vector<FocalPoint> expected;
        for (const SkyPoint& point : sky) {
            const auto place = focal_from_sky(camera, pointing, point);
            if (!place || !std::isfinite(place->x_mm) || !std::isfinite(place->y_mm)) {
                return std::nullopt;
            }
            expected.push_back(*place);
        }
        pointing = moved(camera, pointing, fitted_motion(places, expected, pairs));
    }
    return pointing;
}

/// Degrees in [-180, 180).
double signed_angle(double degrees) {
    return degrees - 360.0 * std::floor((degrees + 180.0) / 360.0);
}

void accept(const Camera& camera, const PointingSearch& search, const Match& match,
            ExposureDigest& digest) {
    digest.pointing = match.pointing;
    digest.pointing.refined = true;
    digest.pointing.matched_stars = static_cast<int>(match.pairs.size());
    digest.pointing.residual_px = match.scatter_mm / pixel_mm(camera);
    digest.pointing.shift_arcsec =
        kArcsecPerDegree * separation_deg(digest.header.boresight, match.pointing.boresight);
    digest.pointing.turn_deg = signed_angle(match.pointing.psi_deg - digest.header.psi_deg);
    digest.pointing.reason.clear();
    digest.transparency = search.transparency(match).value_or(1.0);
}

std::string why_not(const PointingSearch& search, const std::optional<Match>& match) {
    const std::size_t measured = search.field().places.size();
    if (search.covered() == 0.0) {
        return "the star list does not cover this field";
    }
    if (static_cast<int>(search.listed().size()) < kFewestMatches) {
        return fmt::format("{} listed stars on the detectors, fewer than {}",
                           search.listed().size(), kFewestMatches);
    }
    return fmt::format(
        "{} of {} measured stars match {} listed ones; chance alone would pair {:.1f}",
        match ? match->pairs.size() : 0, measured, search.listed().size(),
        match ? search.expected_by_chance(*match) : 0.0);
}

}  // namespace

void refine_pointing(const Camera& camera, const StarList* stars, ExposureDigest& digest) {
    digest.pointing = {};
    digest.pointing.boresight = digest.header.boresight;
    digest.pointing.psi_deg = digest.header.psi_deg;
    digest.transparency = 1.0;
    if (stars == nullptr) {
        digest.pointing.reason = "no star list";
        return;
    }
    PointingSearch search(camera, *stars, digest);
    const std::size_t measured = search.field().places.size();
    if (static_cast<int>(measured) < kFewestMatches) {
        digest.pointing.reason =
            fmt::format("{} stars measured, fewer than {}", measured, kFewestMatches);
        return;
    }
    std::string wcs_problem;
    try {
        if (const auto from_wcs = pointing_from_wcs(camera, digest)) {
            const auto match = search.near(*from_wcs);
            if (match && search.convincing(*match) &&
                match->scatter_mm < kFittingWcs_px * pixel_mm(camera)) {
                accept(camera, search, *match, digest);
                return;
            }
            wcs_problem = "; the WCS in the header does not fit the stars";
        }
    } catch (const InputError& error) {
        wcs_problem = fmt::format("; {}", error.what());
    }
    const auto match = search.around(digest.pointing);
    if (match && search.convincing(*match)) {
        accept(camera, search, *match, digest);
        return;
    }
    digest.pointing.reason = why_not(search, match) + wcs_problem;
}

}  // namespace straymark
