#include "score/pixels.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstddef>
#include <functional>

#include "score/box_cover.h"

namespace straymark::score {
namespace {

/// A pixel this close to a mark's box, or to the true area, is a matter of shape.
constexpr int kBesidePx = 3;

std::vector<PixelBox> boxes_of(const FoundDetector& found) {
    std::vector<PixelBox> boxes;
    for (const FoundMark& mark : found.marks) {
        boxes.push_back(mark.box.grown(kBesidePx));
    }
    return boxes;
}

std::vector<PixelBox> boxes_without_echo(const FoundDetector& found,
                                         const std::vector<bool>& mark_has_echo) {
    std::vector<PixelBox> boxes;
    for (std::size_t i = 0; i < found.marks.size(); ++i) {
        if (!mark_has_echo[i]) {
            boxes.push_back(found.marks[i].box);
        }
    }
    return boxes;
}

/// Sorts the pixels of one detector.
class PixelSorter {
public:
    PixelSorter(const TrueDetector& truth, std::span<const float> response,
                const FoundDetector& found, const std::vector<bool>& mark_has_echo)
        : truth_(truth),
          response_(response),
          found_(found),
          near_mark_(truth.width, truth.height, boxes_of(found)),
          phantom_(truth.width, truth.height, boxes_without_echo(found, mark_has_echo)) {}

    void sort_amplifier(const TrueAmplifier& amplifier, PixelTally& tally) const {
        const bool usable = is_usable(amplifier);
        for (int y = amplifier.section.y0; y < amplifier.section.y1; ++y) {
            for (int x = amplifier.section.x0; x < amplifier.section.x1; ++x) {
                sort_pixel(x, y, usable, tally);
            }
        }
    }

private:
    [[nodiscard]] bool is_usable(const TrueAmplifier& amplifier) const {
        return std::none_of(found_.amplifiers.begin(), found_.amplifiers.end(),
                            [&amplifier](const FoundAmplifier& row) {
                                return row.name == amplifier.name && !row.usable;
                            });
    }

    void sort_pixel(int x, int y, bool usable, PixelTally& tally) const {
        const std::size_t index = std::size_t(y) * truth_.width + x;
        const auto response = static_cast<double>(response_[index]);
        const double strength = std::abs(response);
        const std::int32_t bits = found_.present ? found_.bits[index] : 0;
        const bool flagged = flagged_as(found_, index, response);
        const bool any_flag = (bits & (found_.values.positive | found_.values.negative)) != 0;
        const bool marginal = (bits & found_.values.marginal) != 0;
        const bool unassessed = (bits & found_.values.unassessed) != 0;

        ++tally.pixels;
        tally.true_area += strength >= kTrueResponse ? 1 : 0;
        tally.flagged_area += any_flag ? 1 : 0;
        tally.marginal += marginal ? 1 : 0;
        tally.unassessed += unassessed ? 1 : 0;
        if (strength >= kResponseEdges.front()) {
            const auto edge =
                std::upper_bound(kResponseEdges.begin(), kResponseEdges.end(), strength);
            ResponseBin& bin = tally.bins[std::size_t(edge - kResponseEdges.begin() - 1)];
            ++bin.pixels;
            bin.flagged += flagged ? 1 : 0;
            bin.marginal += marginal ? 1 : 0;
            bin.unassessed += unassessed ? 1 : 0;
        }
        if (strength >= kRequiredResponse) {
            ++tally.required;
            if (flagged) {
                ++tally.required_flagged;
            } else {
                ++tally.missed[std::size_t(miss_reason(x, y, bits, usable))];
            }
        }
        if (any_flag && (strength < kTrueResponse || !flagged)) {
            ++tally.falsely_flagged[std::size_t(false_reason(x, y, strength))];
        }
    }

    [[nodiscard]] MissReason miss_reason(int x, int y, std::int32_t bits, bool usable) const {
        const BitValues& values = found_.values;
        if (!found_.present) {
            return MissReason::no_mask;
        }
        if ((bits & (values.positive | values.negative)) != 0) {
            return MissReason::wrong_sign;
        }
        if (!usable) {
            return MissReason::amplifier_unusable;
        }
        if ((bits & (values.saturated | values.bleed)) != 0) {
            return MissReason::saturated_or_bleed;
        }
        if ((bits & values.defect) != 0) {
            return MissReason::defect;
        }
        if ((bits & values.unassessed) != 0) {
            return MissReason::unassessed;
        }
        if ((bits & values.marginal) != 0) {
            return MissReason::marginal;
        }
        return near_mark_.covers(x, y) ? MissReason::beside_mark : MissReason::no_mark;
    }

    [[nodiscard]] FalseReason false_reason(int x, int y, double strength) const {
        if (strength >= kTrueResponse) {
            return FalseReason::wrong_sign;
        }
        if (strength >= kResponseEdges.front()) {
            return FalseReason::just_below;
        }
        if (phantom_.covers(x, y)) {
            return FalseReason::mark_without_echo;
        }
        return true_area_near(x, y) ? FalseReason::beside_true : FalseReason::nothing_near;
    }

    [[nodiscard]] bool true_area_near(int x, int y) const {
        const PixelBox box = PixelBox{x, y, x + 1, y + 1}.grown(kBesidePx).intersected(
            {0, 0, truth_.width, truth_.height});
        for (int j = box.y0; j < box.y1; ++j) {
            for (int i = box.x0; i < box.x1; ++i) {
                const auto response =
                    static_cast<double>(response_[std::size_t(j) * truth_.width + i]);
                if (std::abs(response) >= kTrueResponse) {
                    return true;
                }
            }
        }
        return false;
    }

    const TrueDetector& truth_;
    std::span<const float> response_;
    const FoundDetector& found_;
    BoxCover near_mark_, phantom_;
};

}  // namespace

std::string_view text_of(MissReason reason) {
    switch (reason) {
        case MissReason::no_mask:
            return "no mask for this detector";
        case MissReason::wrong_sign:
            return "flagged with the opposite sign";
        case MissReason::amplifier_unusable:
            return "amplifier dead, missing or unusable";
        case MissReason::saturated_or_bleed:
            return "saturated or bleed, no echo bit";
        case MissReason::defect:
            return "defect, no echo bit";
        case MissReason::unassessed:
            return "unassessed";
        case MissReason::marginal:
            return "marginal";
        case MissReason::beside_mark:
            return "in or beside a mark's box (shape, strength)";
        case MissReason::no_mark:
            return "no mark there (pair not listed, or elsewhere)";
        case MissReason::count:
            break;
    }
    return "";
}

std::string_view text_of(FalseReason reason) {
    switch (reason) {
        case FalseReason::wrong_sign:
            return "true area, flagged with the opposite sign";
        case FalseReason::just_below:
            return "true response 0.5 to 1";
        case FalseReason::mark_without_echo:
            return "mark where no true echo is";
        case FalseReason::beside_true:
            return "beside the true area";
        case FalseReason::nothing_near:
            return "nothing true near";
        case FalseReason::count:
            break;
    }
    return "";
}

PixelTally& PixelTally::operator+=(const PixelTally& other) {
    for (std::size_t i = 0; i < bins.size(); ++i) {
        bins[i].pixels += other.bins[i].pixels;
        bins[i].flagged += other.bins[i].flagged;
        bins[i].marginal += other.bins[i].marginal;
        bins[i].unassessed += other.bins[i].unassessed;
    }
    std::transform(missed.begin(), missed.end(), other.missed.begin(), missed.begin(),
                   std::plus<>());
    std::transform(falsely_flagged.begin(), falsely_flagged.end(), other.falsely_flagged.begin(),
                   falsely_flagged.begin(), std::plus<>());
    pixels += other.pixels;
    required += other.required;
    required_flagged += other.required_flagged;
    true_area += other.true_area;
    flagged_area += other.flagged_area;
    marginal += other.marginal;
    unassessed += other.unassessed;
    return *this;
}

bool flagged_as(const FoundDetector& found, std::size_t index, double response) {
    if (!found.present) {
        return false;
    }
    const std::int32_t wanted = response < 0.0 ? found.values.negative : found.values.positive;
    const std::int32_t signs = found.values.positive | found.values.negative;
    return wanted != 0 && (found.bits[index] & signs) == wanted;
}

PixelTally tally_pixels(const TrueDetector& truth, std::span<const float> response,
                        const FoundDetector& found, const std::vector<bool>& mark_has_echo) {
    assert(response.size() == std::size_t(truth.width) * truth.height);
    assert(mark_has_echo.size() == found.marks.size());
    assert(!found.present || found.bits.size() == response.size());
    const PixelSorter sorter(truth, response, found, mark_has_echo);
    PixelTally tally;
    for (const TrueAmplifier& amplifier : truth.amplifiers) {
        sorter.sort_amplifier(amplifier, tally);
    }
    return tally;
}

}  // namespace straymark::score
