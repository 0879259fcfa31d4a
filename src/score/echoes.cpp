#include "score/echoes.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstddef>
#include <map>
#include <numeric>
#include <optional>
#include <utility>

#include "core/frames.h"
#include "core/pixel_box.h"
#include "score/pixels.h"

namespace straymark::score {
namespace {

/// Echoes whose total is at least this share of peak times noise-equivalent area have one sign; a
/// derivative-like echo's total says nothing of its strength.
constexpr double kOneSigned = 0.3;
/// Echoes whose total is at most this many times peak times noise-equivalent area are compact: the
/// place of their largest response is sharp (a star's is near 0.5, a plateau's has no bound).
constexpr double kCompact = 2.0;

/// Indices of the echoes and marks of one victim and one source.
struct PairMembers {
    std::vector<std::size_t> echoes, marks;
};
using PairKey = std::pair<std::string, std::string>;

DetectorPixel pixel_of(double x_px, double y_px) {
    return {static_cast<int>(std::lround(x_px)), static_cast<int>(std::lround(y_px))};
}

std::map<PairKey, PairMembers> members_by_pair(const TrueDetector& truth,
                                               const FoundDetector& found) {
    std::map<PairKey, PairMembers> pairs;
    for (std::size_t i = 0; i < truth.echoes.size(); ++i) {
        pairs[{truth.echoes[i].victim, truth.echoes[i].source}].echoes.push_back(i);
    }
    for (std::size_t i = 0; i < found.marks.size(); ++i) {
        const DetectorPixel place = pixel_of(found.marks[i].x_px, found.marks[i].y_px);
        if (const TrueAmplifier* victim = amplifier_at(truth, place.x, place.y)) {
            pairs[{victim->name, found.marks[i].source}].marks.push_back(i);
        }
    }
    return pairs;
}

bool lies_on(const FoundMark& mark, const TrueEcho& echo) {
    const bool near = std::abs(mark.x_px - echo.x_px) <= kSamePlacePx &&
                      std::abs(mark.y_px - echo.y_px) <= kSamePlacePx;
    const DetectorPixel peak = pixel_of(echo.x_px, echo.y_px);
    return near || mark.box.contains(peak.x, peak.y);
}

/// Joins what lies on each other, marks after echoes in one numbering.
class Groups {
public:
    explicit Groups(std::size_t count) : parent_(count) {
        std::iota(parent_.begin(), parent_.end(), std::size_t{0});
    }
    std::size_t root(std::size_t i) {
        while (parent_[i] != i) {
            parent_[i] = parent_[parent_[i]];
            i = parent_[i];
        }
        return i;
    }
    void join(std::size_t a, std::size_t b) { parent_[root(a)] = root(b); }

private:
    std::vector<std::size_t> parent_;
};

class EchoJudge {
public:
    EchoJudge(const TrueDetector& truth, std::span<const float> response,
              const FoundDetector& found)
        : truth_(truth),
          response_(response),
          found_(found),
          square_sum_(sum_of_squares(truth.psf)) {}

    EchoResult run() {
        result_.mark_has_echo.assign(found_.marks.size(), false);
        for (const auto& [key, members] : members_by_pair(truth_, found_)) {
            judge_pair(members);
        }
        EchoTally& tally = result_.tally;
        tally.marks = static_cast<std::int64_t>(found_.marks.size());
        tally.marks_without_echo =
            std::count(result_.mark_has_echo.begin(), result_.mark_has_echo.end(), false);
        return std::move(result_);
    }

private:
    struct Group {
        std::vector<std::size_t> echoes, marks;
    };

    void judge_pair(const PairMembers& members) {
        const std::size_t echo_count = members.echoes.size();
        Groups groups(echo_count + members.marks.size());
        for (std::size_t m = 0; m < members.marks.size(); ++m) {
            for (std::size_t e = 0; e < echo_count; ++e) {
                if (lies_on(found_.marks[members.marks[m]], truth_.echoes[members.echoes[e]])) {
                    result_.mark_has_echo[members.marks[m]] = true;
                    groups.join(e, echo_count + m);
                }
            }
        }
        std::map<std::size_t, Group> joined;
        for (std::size_t e = 0; e < echo_count; ++e) {
            joined[groups.root(e)].echoes.push_back(members.echoes[e]);
        }
        for (std::size_t m = 0; m < members.marks.size(); ++m) {
            joined[groups.root(echo_count + m)].marks.push_back(members.marks[m]);
        }
        for (const auto& [root, group] : joined) {
            judge_group(group);
        }
    }

    void judge_group(const Group& group) {
        bool any_required = false;
        for (const std::size_t e : group.echoes) {
            if (!is_required(truth_.echoes[e])) {
                continue;
            }
            any_required = true;
            result_.tally.echoes.push_back(judged(truth_.echoes[e], group));
        }
        if (any_required && !group.marks.empty()) {
            compare_strength(group);
        }
    }

    [[nodiscard]] std::size_t index_of(DetectorPixel pixel) const {
        return std::size_t(pixel.y) * truth_.width + pixel.x;
    }

    [[nodiscard]] bool is_required(const TrueEcho& echo) const {
        const DetectorPixel peak = pixel_of(echo.x_px, echo.y_px);
        const TrueAmplifier* victim = amplifier_at(truth_, peak.x, peak.y);
        if (victim == nullptr) {
            return false;
        }
        const double sign = echo.peak_e < 0.0 ? -1.0 : 1.0;
        const double alone = std::abs(echo.peak_e) / (victim->noise_e * std::sqrt(square_sum_));
        return sign * static_cast<double>(response_[index_of(peak)]) >= kRequiredResponse &&
               alone >= kRequiredResponse;
    }

    /// Of a required echo (its peak is not zero), in units of the noise-equivalent area.
    [[nodiscard]] double width_of(const TrueEcho& echo) const {
        return echo.total_e / echo.peak_e * square_sum_;
    }

    [[nodiscard]] RequiredEcho judged(const TrueEcho& echo, const Group& group) const {
        const DetectorPixel peak = pixel_of(echo.x_px, echo.y_px);
        RequiredEcho result;
        result.victim = echo.victim;
        result.source = echo.source;
        result.flagged = flagged_as(found_, index_of(peak), echo.peak_e);
        result.listed = !group.marks.empty();
        const double width = width_of(echo);
        if (group.echoes.size() == 1 && group.marks.size() == 1 && width >= kOneSigned &&
            width <= kCompact) {
            judge_place(found_.marks[group.marks.front()], echo, result);
        }
        return result;
    }

    void judge_place(const FoundMark& mark, const TrueEcho& echo, RequiredEcho& result) const {
        const DetectorPixel marked = pixel_of(mark.x_px, mark.y_px);
        const DetectorPixel place =
            largest_response_near(pixel_of(echo.x_px, echo.y_px), echo.peak_e);
        const auto there = static_cast<double>(response_[index_of(marked)]);
        const auto largest = static_cast<double>(response_[index_of(place)]);
        result.place_judged = true;
        if (there / largest >= 1.0 - kSameResponse) {
            return;
        }
        result.dx_px = mark.x_px - place.x;
        result.dy_px = mark.y_px - place.y;
        const double own_dx = mark.x_px - echo.x_px;
        const double own_dy = mark.y_px - echo.y_px;
        if (std::hypot(own_dx, own_dy) < std::hypot(result.dx_px, result.dy_px)) {
            result.dx_px = own_dx;
            result.dy_px = own_dy;
        }
    }

    [[nodiscard]] DetectorPixel largest_response_near(DetectorPixel peak, double sign) const {
        const PixelBox box = PixelBox{peak.x, peak.y, peak.x + 1, peak.y + 1}
                                 .grown(kPlaceSearchPx)
                                 .intersected({0, 0, truth_.width, truth_.height});
        DetectorPixel best = peak;
        for (int y = box.y0; y < box.y1; ++y) {
            for (int x = box.x0; x < box.x1; ++x) {
                const float here = response_[index_of({x, y})];
                const float there = response_[index_of(best)];
                if (sign < 0.0 ? here < there : here > there) {
                    best = {x, y};
                }
            }
        }
        return best;
    }

    void compare_strength(const Group& group) {
        StrengthMatch match;
        for (const std::size_t e : group.echoes) {
            const TrueEcho& echo = truth_.echoes[e];
            if (is_required(echo) && width_of(echo) < kOneSigned) {
                return;
            }
            match.victim = echo.victim;
            match.source = echo.source;
            if (std::abs(echo.peak_e) > std::abs(match.truth_e)) {
                match.truth_e = echo.peak_e;
            }
        }
        for (const std::size_t m : group.marks) {
            const FoundMark& mark = found_.marks[m];
            if (!mark.measured) {
                return;
            }
            if (std::abs(mark.peak_e) > std::abs(match.predicted_e)) {
                match.predicted_e = mark.peak_e;
                match.error_e = mark.error_e;
            }
        }
        if (match.truth_e != 0.0) {
            result_.tally.strengths.push_back(std::move(match));
        }
    }

    const TrueDetector& truth_;
    std::span<const float> response_;
    const FoundDetector& found_;
    double square_sum_;
    EchoResult result_;
};

}  // namespace

EchoTally& EchoTally::operator+=(const EchoTally& other) {
    echoes.insert(echoes.end(), other.echoes.begin(), other.echoes.end());
    strengths.insert(strengths.end(), other.strengths.begin(), other.strengths.end());
    marks += other.marks;
    marks_without_echo += other.marks_without_echo;
    return *this;
}

EchoResult tally_echoes(const TrueDetector& truth, std::span<const float> response,
                        const FoundDetector& found) {
    assert(response.size() == std::size_t(truth.width) * truth.height);
    return EchoJudge(truth, response, found).run();
}

}  // namespace straymark::score
