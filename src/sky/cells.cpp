#include "sky/cells.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <numbers>

namespace straymark {
namespace {

constexpr double kRadians = std::numbers::pi / 180.0;
/// Added to the width of a disc so that rounding never loses a star on its rim.
constexpr double kRim_deg = 1e-9;

}  // namespace

SkyCells::SkyCells(double size_deg) {
    assert(size_deg >= 0.05 && size_deg <= 180.0);
    const int zone_count = std::max(1, static_cast<int>(std::lround(180.0 / size_deg)));
    height_deg_ = 180.0 / zone_count;
    first_.reserve(static_cast<std::size_t>(zone_count) + 1);
    first_.push_back(0);
    for (int z = 0; z < zone_count; ++z) {
        const double middle_deg = -90.0 + (z + 0.5) * height_deg_;
        const long parts = std::lround(360.0 * std::cos(middle_deg * kRadians) / height_deg_);
        first_.push_back(first_.back() + static_cast<std::int32_t>(std::max(1L, parts)));
    }
}

int SkyCells::zone(double dec_deg) const {
    return std::clamp(static_cast<int>(std::floor((dec_deg + 90.0) / height_deg_)), 0, zones() - 1);
}

std::int32_t SkyCells::cell(SkyPoint point) const {
    const auto z = static_cast<std::size_t>(zone(point.dec_deg));
    const std::int32_t parts = first_[z + 1] - first_[z];
    const auto part = static_cast<std::int32_t>(std::floor(point.ra_deg / 360.0 * parts));
    return first_[z] + std::clamp(part, 0, parts - 1);
}

SkyPoint SkyCells::centre(std::int32_t cell) const {
    const auto next = std::upper_bound(first_.begin(), first_.end(), cell);
    const auto z = static_cast<std::size_t>(next - first_.begin()) - 1;
    const std::int32_t parts = first_[z + 1] - first_[z];
    return {360.0 * (cell - first_[z] + 0.5) / parts,
            -90.0 + (static_cast<double>(z) + 0.5) * height_deg_};
}

std::vector<SkyCells::Span> SkyCells::touched(SkyPoint centre, double radius_deg) const {
    // The widest place of a disc about declination d spans asin(sin r / cos d) to either side.
    double half_width_deg = 180.0;
    if (std::abs(centre.dec_deg) + radius_deg < 90.0) {
        const double sine = std::sin(radius_deg * kRadians) / std::cos(centre.dec_deg * kRadians);
        half_width_deg = std::asin(std::min(1.0, sine)) / kRadians + kRim_deg;
    }
    std::vector<Span> spans;
    const int last_zone = zone(centre.dec_deg + radius_deg + kRim_deg);
    for (int z = zone(centre.dec_deg - radius_deg - kRim_deg); z <= last_zone; ++z) {
        const std::int32_t start = first_[static_cast<std::size_t>(z)];
        const std::int32_t end = first_[static_cast<std::size_t>(z) + 1];
        const std::int32_t parts = end - start;
        const auto part = [parts](double ra_deg) {
            return static_cast<std::int32_t>(std::floor(ra_deg / 360.0 * parts));
        };
        const std::int32_t west = part(centre.ra_deg - half_width_deg);
        const std::int32_t east = part(centre.ra_deg + half_width_deg);
        if (east - west + 1 >= parts) {
            spans.push_back({start, end});
        } else if (west < 0) {
            spans.push_back({start, start + east + 1});
            spans.push_back({end + west, end});
        } else if (east >= parts) {
            spans.push_back({start, start + east - parts + 1});
            spans.push_back({start + west, end});
        } else {
            spans.push_back({start + west, start + east + 1});
        }
    }
    return spans;
}

}  // namespace straymark
