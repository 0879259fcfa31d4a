#include "score/close_ups.h"

#include <algorithm>
#include <cmath>
#include <cstddef>

#include "score/pixels.h"

namespace straymark::score {
namespace {

std::int64_t wrong_pixels(const CloseUp& view) {
    const TrueDetector& truth = view.detector->truth;
    const PixelBox box = window_of(view).intersected({0, 0, truth.width, truth.height});
    std::int64_t wrong = 0;
    for (int y = box.y0; y < box.y1; ++y) {
        for (int x = box.x0; x < box.x1; ++x) {
            const PixelClass kind = class_of(*view.detector, std::size_t(y) * truth.width + x);
            wrong += kind == PixelClass::missed || kind == PixelClass::outside ? 1 : 0;
        }
    }
    return wrong;
}

/// All echoes that had to be found, strongest first.
std::vector<CloseUp> candidates(std::span<const FigureDetector> detectors) {
    std::vector<CloseUp> views;
    for (const FigureDetector& detector : detectors) {
        for (const TrueEcho& echo : detector.truth.echoes) {
            const DetectorPixel centre{static_cast<int>(std::lround(echo.x_px)),
                                       static_cast<int>(std::lround(echo.y_px))};
            if (amplifier_at(detector.truth, centre.x, centre.y) == nullptr) {
                continue;
            }
            const auto response = static_cast<double>(
                detector.response[std::size_t(centre.y) * detector.truth.width + centre.x]);
            if (std::abs(response) >= kRequiredResponse) {
                views.push_back({&detector, &echo, centre, response, 0, ""});
            }
        }
    }
    std::stable_sort(views.begin(), views.end(), [](const CloseUp& a, const CloseUp& b) {
        return std::abs(a.response) > std::abs(b.response);
    });
    return views;
}

/// Views that keep clear of each other.
class Selection {
public:
    template <typename Iterator>
    void take(int wanted, std::string_view reason, Iterator begin, Iterator end) {
        for (Iterator view = begin; view != end && wanted > 0; ++view) {
            if (is_apart(*view)) {
                picked_.push_back(*view);
                picked_.back().reason = reason;
                --wanted;
            }
        }
    }
    std::vector<CloseUp> views() { return std::move(picked_); }

private:
    [[nodiscard]] bool is_apart(const CloseUp& view) const {
        return std::none_of(picked_.begin(), picked_.end(), [&view](const CloseUp& other) {
            return other.detector == view.detector &&
                   window_of(other).contains(view.centre.x, view.centre.y);
        });
    }
    std::vector<CloseUp> picked_;
};

/// Those with most wrong pixels first; of very many echoes a regular sample is counted.
std::vector<CloseUp> worst_first(const std::vector<CloseUp>& views) {
    constexpr std::size_t kMostCounted = 2000;
    const std::size_t stride = views.size() / kMostCounted + 1;
    std::vector<CloseUp> counted;
    for (std::size_t i = 0; i < views.size(); i += stride) {
        counted.push_back(views[i]);
        counted.back().wrong = wrong_pixels(views[i]);
    }
    std::stable_sort(counted.begin(), counted.end(),
                     [](const CloseUp& a, const CloseUp& b) { return a.wrong > b.wrong; });
    return counted;
}

}  // namespace

PixelBox window_of(const CloseUp& view) {
    return PixelBox{view.centre.x, view.centre.y, view.centre.x + 1, view.centre.y + 1}.grown(
        kCloseUpPx / 2);
}

std::vector<CloseUp> close_ups(std::span<const FigureDetector> detectors) {
    const std::vector<CloseUp> views = candidates(detectors);
    const std::vector<CloseUp> worst = worst_first(views);
    Selection selection;
    selection.take(2, "strong", views.begin(), views.end());
    selection.take(2, "middling", views.begin() + static_cast<std::ptrdiff_t>(views.size() / 2),
                   views.end());
    selection.take(2, "weak", views.rbegin(), views.rend());
    selection.take(2, "worst", worst.begin(), worst.end());
    return selection.views();
}

}  // namespace straymark::score
