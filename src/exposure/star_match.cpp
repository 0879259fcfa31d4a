#include "exposure/star_match.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstdint>
#include <limits>
#include <tuple>

namespace straymark {
namespace {

/// Points sorted into square cells, so that those near a place are found without looking at all.
class PointGrid {
public:
    PointGrid(std::span<const FocalPoint> points, double cell_mm)
        : points_(points), cell_mm_(cell_mm) {
        order_.resize(points.size());
        for (std::size_t i = 0; i < points.size(); ++i) {
            order_[i] = {key(points[i].x_mm), key(points[i].y_mm), static_cast<int>(i)};
        }
        std::sort(order_.begin(), order_.end());
    }

    /// Calls `see(index)` for every point whose cell touches the square of half-width `reach_mm`.
    template <typename See>
    void near(FocalPoint place, double reach_mm, See see) const {
        const std::int64_t last_x = key(place.x_mm + reach_mm);
        const std::int64_t first_y = key(place.y_mm - reach_mm);
        const std::int64_t last_y = key(place.y_mm + reach_mm);
        for (std::int64_t x = key(place.x_mm - reach_mm); x <= last_x; ++x) {
            auto at = std::lower_bound(order_.begin(), order_.end(), Entry{x, first_y, -1});
            for (; at != order_.end() && at->x == x && at->y <= last_y; ++at) {
                see(at->index);
            }
        }
    }

    /// Index of the nearest point within `reach_mm`; -1 where there is none.
    [[nodiscard]] int nearest(FocalPoint place, double reach_mm) const {
        int best = -1;
        double best_distance = reach_mm;
        near(place, reach_mm, [&](int index) {
            const FocalPoint& point = points_[static_cast<std::size_t>(index)];
            const double distance = std::hypot(point.x_mm - place.x_mm, point.y_mm - place.y_mm);
            if (distance < best_distance || (distance == best_distance && best < 0)) {
                best = index;
                best_distance = distance;
            }
        });
        return best;
    }

private:
    struct Entry {
        std::int64_t x, y;
        int index;
        bool operator<(const Entry& other) const {
            return std::tie(x, y, index) < std::tie(other.x, other.y, other.index);
        }
    };
    [[nodiscard]] std::int64_t key(double mm) const {
        return static_cast<std::int64_t>(std::floor(mm / cell_mm_));
    }

    std::span<const FocalPoint> points_;
    double cell_mm_;
    std::vector<Entry> order_;
};

double farthest(std::span<const FocalPoint> points) {
    double out = 0.0;
    for (const FocalPoint& point : points) {
        out = std::max(out, std::hypot(point.x_mm, point.y_mm));
    }
    return out;
}

/// Turns are tried so closely that none moves a star by more than half a bin past the last.
int turns_to_a_side(std::span<const FocalPoint> expected, const MotionRange& range) {
    return static_cast<int>(std::ceil(range.turn_rad * farthest(expected) / range.bin_mm));
}

/// Votes for shifts, in square bins; a shift's votes are those of four bins that meet.
class ShiftVotes {
public:
    explicit ShiftVotes(const MotionRange& range)
        : range_(range),
          half_(static_cast<int>(std::ceil(range.shift_mm / range.bin_mm)) + 1),
          votes_(4 * static_cast<std::size_t>(half_) * static_cast<std::size_t>(half_)) {}

    void clear() { std::fill(votes_.begin(), votes_.end(), 0); }
    void add(double dx_mm, double dy_mm) {
        const int x = bin(dx_mm);
        const int y = bin(dy_mm);
        if (x >= 0 && x < 2 * half_ && y >= 0 && y < 2 * half_) {
            ++votes_[index(x, y)];
        }
    }

    struct Peak {
        int votes = 0;
        double dx_mm = 0.0, dy_mm = 0.0;
    };
    [[nodiscard]] Peak highest() const {
        Peak peak;
        for (int y = 0; y + 1 < 2 * half_; ++y) {
            for (int x = 0; x + 1 < 2 * half_; ++x) {
                const int sum = at(x, y) + at(x + 1, y) + at(x, y + 1) + at(x + 1, y + 1);
                if (sum > peak.votes) {
                    peak = {sum, corner(x + 1), corner(y + 1)};
                }
            }
        }
        return peak;
    }

private:
    [[nodiscard]] int bin(double shift_mm) const {
        return static_cast<int>(std::floor(shift_mm / range_.bin_mm)) + half_;
    }
    [[nodiscard]] double corner(int line) const { return (line - half_) * range_.bin_mm; }
    [[nodiscard]] std::size_t index(int x, int y) const {
        return static_cast<std::size_t>(y) * static_cast<std::size_t>(2 * half_) +
               static_cast<std::size_t>(x);
    }
    [[nodiscard]] int at(int x, int y) const { return votes_[index(x, y)]; }

    MotionRange range_;
    int half_;  ///< bins to each side of no shift
    std::vector<int> votes_;
};

}  // namespace

FocalPoint PlaneMotion::applied(FocalPoint point) const {
    const double c = std::cos(turn_rad);
    const double s = std::sin(turn_rad);
    return {c * point.x_mm - s * point.y_mm + dx_mm, s * point.x_mm + c * point.y_mm + dy_mm};
}

FocalPoint PlaneMotion::undone(FocalPoint point) const {
    const double c = std::cos(turn_rad);
    const double s = std::sin(turn_rad);
    const double x = point.x_mm - dx_mm;
    const double y = point.y_mm - dy_mm;
    return {c * x + s * y, -s * x + c * y};
}

std::optional<PlaneMotion> voted_motion(std::span<const FocalPoint> measured,
                                        std::span<const FocalPoint> expected,
                                        const MotionRange& range) {
    const PointGrid grid(measured, range.shift_mm);
    const int turns = turns_to_a_side(expected, range);
    ShiftVotes votes(range);
    std::optional<PlaneMotion> best;
    int best_votes = 0;
    for (int turn = -turns; turn <= turns; ++turn) {
        PlaneMotion motion;
        motion.turn_rad = turns > 0 ? range.turn_rad * turn / turns : 0.0;
        votes.clear();
        for (const FocalPoint& point : expected) {
            const FocalPoint turned = motion.applied(point);
            grid.near(turned, range.shift_mm, [&](int index) {
                const FocalPoint& star = measured[static_cast<std::size_t>(index)];
                votes.add(star.x_mm - turned.x_mm, star.y_mm - turned.y_mm);
            });
        }
        const ShiftVotes::Peak peak = votes.highest();
        if (peak.votes > best_votes) {
            best_votes = peak.votes;
            motion.dx_mm = peak.dx_mm;
            motion.dy_mm = peak.dy_mm;
            best = motion;
        }
    }
    return best;
}

double motions_tried(std::span<const FocalPoint> expected, const MotionRange& range) {
    const double shifts = 2.0 * range.shift_mm / range.bin_mm;
    return shifts * shifts * (2.0 * turns_to_a_side(expected, range) + 1.0);
}

std::vector<StarPair> nearest_pairs(std::span<const FocalPoint> measured,
                                    std::span<const FocalPoint> moved_expected, double radius_mm) {
    const PointGrid measured_grid(measured, radius_mm);
    const PointGrid expected_grid(moved_expected, radius_mm);
    std::vector<StarPair> pairs;
    for (std::size_t i = 0; i < moved_expected.size(); ++i) {
        const int star = measured_grid.nearest(moved_expected[i], radius_mm);
        if (star < 0) {
            continue;
        }
        const FocalPoint& place = measured[static_cast<std::size_t>(star)];
        if (expected_grid.nearest(place, radius_mm) == static_cast<int>(i)) {
            pairs.push_back({star, static_cast<int>(i),
                             std::hypot(place.x_mm - moved_expected[i].x_mm,
                                        place.y_mm - moved_expected[i].y_mm)});
        }
    }
    return pairs;
}

// Closed form of the plane's orthogonal Procrustes problem: about the centroids, the turn is that
// of the summed dot and cross products.
PlaneMotion fitted_motion(std::span<const FocalPoint> measured,
                          std::span<const FocalPoint> expected, std::span<const StarPair> pairs) {
    assert(pairs.size() >= 2);
    FocalPoint from;
    FocalPoint to;
    for (const StarPair& pair : pairs) {
        const FocalPoint& m = measured[static_cast<std::size_t>(pair.measured)];
        const FocalPoint& e = expected[static_cast<std::size_t>(pair.expected)];
        from = {from.x_mm + e.x_mm, from.y_mm + e.y_mm};
        to = {to.x_mm + m.x_mm, to.y_mm + m.y_mm};
    }
    const auto count = static_cast<double>(pairs.size());
    from = {from.x_mm / count, from.y_mm / count};
    to = {to.x_mm / count, to.y_mm / count};
    double dot = 0.0;
    double cross = 0.0;
    for (const StarPair& pair : pairs) {
        const FocalPoint& m = measured[static_cast<std::size_t>(pair.measured)];
        const FocalPoint& e = expected[static_cast<std::size_t>(pair.expected)];
        const double ex = e.x_mm - from.x_mm;
        const double ey = e.y_mm - from.y_mm;
        const double mx = m.x_mm - to.x_mm;
        const double my = m.y_mm - to.y_mm;
        dot += ex * mx + ey * my;
        cross += ex * my - ey * mx;
    }
    PlaneMotion motion;
    motion.turn_rad = std::atan2(cross, dot);
    const FocalPoint turned = motion.applied(from);
    motion.dx_mm = to.x_mm - turned.x_mm;
    motion.dy_mm = to.y_mm - turned.y_mm;
    return motion;
}

double log_chance(int count, double mean) {
    if (count <= mean) {
        return 0.0;
    }
    if (mean <= 0.0) {
        return -std::numeric_limits<double>::infinity();
    }
    return count - mean + count * std::log(mean / count);
}

}  // namespace straymark
