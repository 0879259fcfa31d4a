#include "io/star_coverage.h"

#include <algorithm>
#include <cmath>
#include <numbers>

#include "sky/projection.h"

namespace straymark::io {
namespace {

constexpr int kLevels = 6;  // cells of 0.15 to 4.8 degrees
constexpr int kNeighbours = 8;
/// An empty cell with this many populated neighbours counts as a hole.
constexpr int kSurrounded = 6;
/// Holes that may be left, as a fraction of the populated cells.
constexpr double kHolesAllowed = 1e-3;

/// The place `north` and `east` of a point by small angles, in degrees.
SkyPoint moved(SkyPoint from, double east_deg, double north_deg) {
    const double dec = std::clamp(from.dec_deg + north_deg, -90.0, 90.0);
    const double cosine = std::max(0.01, std::cos(from.dec_deg * std::numbers::pi / 180.0));
    const double ra = std::fmod(from.ra_deg + east_deg / cosine + 720.0, 360.0);
    return {ra, dec};
}

/// The place at an angular distance and position angle from another, radians.
SkyPoint at_angle(SkyPoint from, double position_angle, double distance) {
    constexpr double kRadians = std::numbers::pi / 180.0;
    const double sine = std::sin(from.dec_deg * kRadians);
    const double cosine = std::cos(from.dec_deg * kRadians);
    const double toward = std::sin(distance) * std::cos(position_angle);
    const double along = cosine * std::cos(distance) - sine * toward;
    const double east = std::sin(distance) * std::sin(position_angle);
    const double up = sine * std::cos(distance) + cosine * toward;
    const double ra_deg = from.ra_deg + std::atan2(east, along) / kRadians;
    return {std::fmod(ra_deg + 360.0, 360.0), std::atan2(up, std::hypot(along, east)) / kRadians};
}

int populated_neighbours(const SkyCells& cells, const std::vector<std::uint32_t>& stars,
                         std::int32_t cell) {
    const SkyPoint centre = cells.centre(cell);
    const double step = cells.zone_height_deg();
    int populated = 0;
    for (int i = 0; i <= kNeighbours; ++i) {
        const int east = i % 3 - 1;
        const int north = i / 3 - 1;
        if (east != 0 || north != 0) {
            const std::int32_t neighbour = cells.cell(moved(centre, east * step, north * step));
            populated += stars[static_cast<std::size_t>(neighbour)] > 0 ? 1 : 0;
        }
    }
    return populated;
}

/// Empty cells among populated ones.
int holes(const SkyCells& cells, const std::vector<std::uint32_t>& stars) {
    int found = 0;
    for (std::int32_t cell = 0; cell < cells.count(); ++cell) {
        if (stars[static_cast<std::size_t>(cell)] == 0 &&
            populated_neighbours(cells, stars, cell) >= kSurrounded) {
            ++found;
        }
    }
    return found;
}

}  // namespace

CoverageFinder::CoverageFinder() {
    for (int level = 0; level < kLevels; ++level) {
        SkyCells cells(kStarCellSize_deg * (1 << level));
        std::vector<std::uint32_t> stars(static_cast<std::size_t>(cells.count()));
        levels_.push_back({std::move(cells), std::move(stars)});
    }
}

void CoverageFinder::add(SkyPoint star) {
    stars_ += 1.0;
    for (Level& level : levels_) {
        ++level.stars[static_cast<std::size_t>(level.cells.cell(star))];
    }
}

StarCoverage CoverageFinder::found() const {
    for (const Level& level : levels_) {
        StarCoverage out{{}, level.cells.zone_height_deg(), {}};
        for (std::int32_t cell = 0; cell < level.cells.count(); ++cell) {
            if (level.stars[static_cast<std::size_t>(cell)] > 0) {
                out.cells.push_back(cell);
            }
        }
        const auto populated = static_cast<double>(out.cells.size());
        if (stars_ >= kStarsForCoverage * populated &&
            holes(level.cells, level.stars) <= kHolesAllowed * populated) {
            return out;
        }
    }
    return {};
}

CoverageMap::CoverageMap(StarCoverage coverage)
    : coverage_(std::move(coverage)), cells_(coverage_.cell_size_deg) {}

bool CoverageMap::covers(SkyPoint point) const {
    if (coverage_.declared.empty()) {
        return std::binary_search(coverage_.cells.begin(), coverage_.cells.end(),
                                  cells_.cell(point));
    }
    return std::any_of(coverage_.declared.begin(), coverage_.declared.end(),
                       [point](const CoveredDisc& disc) {
                           return separation_deg(disc.centre, point) <= disc.radius_deg;
                       });
}

double CoverageMap::fraction(SkyPoint centre, double radius_deg) const {
    constexpr int kPlaces = 2000;
    const double golden_angle = std::numbers::pi * (3.0 - std::sqrt(5.0));
    const double radius = std::min(radius_deg, 180.0) * std::numbers::pi / 180.0;
    int covered = 0;
    for (int i = 0; i < kPlaces; ++i) {
        // Equal areas on the sphere: 1 - cos(distance) grows evenly; the last lies on the rim.
        const double share = static_cast<double>(i) / (kPlaces - 1);
        const double distance = 2.0 * std::asin(std::sqrt(share) * std::sin(0.5 * radius));
        covered += covers(at_angle(centre, i * golden_angle, distance)) ? 1 : 0;
    }
    return static_cast<double>(covered) / kPlaces;
}

}  // namespace straymark::io
