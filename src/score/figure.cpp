#include "score/figure.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstddef>
#include <cstdint>
#include <fmt/format.h>
#include <string_view>

#include "score/close_ups.h"
#include "score/pixels.h"

namespace straymark::score {
namespace {

constexpr Colour kPage{255, 255, 255};
constexpr Colour kInk{30, 30, 34};
constexpr Colour kFaintInk{110, 110, 118};
constexpr Colour kDark{18, 20, 26};

constexpr int kMargin = 24;
constexpr int kGap = 16;
constexpr int kOverviewSide = 624;
constexpr int kMostCloseUps = 8;
constexpr int kZoom = 4;
constexpr int kCloseUpSide = kCloseUpPx * kZoom;
constexpr int kWidth = 2 * kMargin + 2 * kOverviewSide + kGap;
constexpr int kOverviewTop = 92;

constexpr std::array<Colour, static_cast<std::size_t>(PixelClass::count)> kClassColours = {{
    kDark,            // clear
    {86, 180, 233},   // found: sky blue
    {213, 94, 0},     // missed: vermilion
    {240, 228, 66},   // outside: yellow
    {120, 122, 128},  // between: grey
    {150, 84, 122},   // unknown: reddish purple, darkened
}};
constexpr std::array<std::string_view, static_cast<std::size_t>(PixelClass::count)> kClassTexts = {
    "clear",
    "flagged, true",
    "missed (1.5 or more)",
    "flagged, not true",
    "1 to 1.5, not flagged",
    "marginal or unassessed"};

Colour mixed(Colour a, Colour b, double share_of_b) {
    const auto mix = [share_of_b](std::uint8_t x, std::uint8_t y) {
        return static_cast<std::uint8_t>(std::lround((1.0 - share_of_b) * x + share_of_b * y));
    };
    return {mix(a.red, b.red), mix(a.green, b.green), mix(a.blue, b.blue)};
}

/// Positive through blue to white, negative through orange to white; a response of 20 is the end.
Colour response_colour(double response) {
    constexpr double kSoft = 0.5;
    constexpr double kEnd = 20.0;
    const double level =
        std::min(1.0, std::asinh(std::abs(response) / kSoft) / std::asinh(kEnd / kSoft));
    const Colour hue = response < 0.0 ? Colour{230, 159, 0} : Colour{86, 180, 233};
    constexpr double kFullHue = 0.7;
    return level < kFullHue ? mixed(kDark, hue, level / kFullHue)
                            : mixed(hue, kPage, (level - kFullHue) / (1.0 - kFullHue));
}

/// Mean colour of the pixels that are not clear, kept visible however few they are.
Colour class_colour_of_block(const FigureDetector& detector, const PixelBox& block) {
    constexpr double kLeastShare = 0.6;
    std::array<double, 3> sum{};
    int drawn = 0;
    for (int y = block.y0; y < block.y1; ++y) {
        for (int x = block.x0; x < block.x1; ++x) {
            const PixelClass kind = class_of(detector, std::size_t(y) * detector.truth.width + x);
            if (kind != PixelClass::clear) {
                const Colour colour = kClassColours[static_cast<std::size_t>(kind)];
                sum[0] += colour.red;
                sum[1] += colour.green;
                sum[2] += colour.blue;
                ++drawn;
            }
        }
    }
    if (drawn == 0) {
        return kDark;
    }
    const auto mean = [drawn](double total) { return static_cast<std::uint8_t>(total / drawn); };
    const double share = static_cast<double>(drawn) / (block.width() * block.height());
    return mixed(kDark, {mean(sum[0]), mean(sum[1]), mean(sum[2])}, std::max(kLeastShare, share));
}

Colour response_colour_of_block(const FigureDetector& detector, const PixelBox& block) {
    double largest = 0.0;
    for (int y = block.y0; y < block.y1; ++y) {
        for (int x = block.x0; x < block.x1; ++x) {
            const auto here =
                static_cast<double>(detector.response[std::size_t(y) * detector.truth.width + x]);
            largest = std::abs(here) > std::abs(largest) ? here : largest;
        }
    }
    return response_colour(largest);
}

/// Draws a detector into `panel`, first row at the bottom: each dot a square block of pixels where
/// the detector is larger than the panel, each pixel a square of dots where it is smaller.
template <typename BlockColour>
void draw_detector(Canvas& canvas, const PixelBox& panel, const FigureDetector& detector,
                   BlockColour block_colour) {
    const int width = detector.truth.width;
    const int height = detector.truth.height;
    const int shrink = std::max((width + panel.width() - 1) / panel.width(),
                                (height + panel.height() - 1) / panel.height());
    const int zoom = shrink > 1 ? 1 : std::min(panel.width() / width, panel.height() / height);
    for (int j = 0; j * shrink < height; ++j) {
        for (int i = 0; i * shrink < width; ++i) {
            const PixelBox block =
                PixelBox{i * shrink, j * shrink, (i + 1) * shrink, (j + 1) * shrink}.intersected(
                    {0, 0, width, height});
            const int left = panel.x0 + i * zoom;
            const int bottom = panel.y1 - j * zoom;
            canvas.fill({left, bottom - zoom, left + zoom, bottom}, block_colour(detector, block));
        }
    }
    canvas.text(panel.x0 + 4, panel.y0 + 4, detector.truth.id, kPage);
}

/// Where the parts of a page lie; detectors in rows, as many as fit a square.
struct Layout {
    explicit Layout(std::size_t detectors) {
        while (columns * columns < static_cast<int>(detectors)) {
            ++columns;
        }
        cell = kOverviewSide / columns;
        const int rows = (static_cast<int>(detectors) + columns - 1) / columns;
        close_up_top = kOverviewTop + rows * cell + 44;
        legend_top = close_up_top + 2 * kCloseUpSide + 34;
        height = legend_top + 50;
    }
    int columns = 1;
    int cell = 0;
    int close_up_top = 0;
    int legend_top = 0;
    int height = 0;
};

template <typename BlockColour>
void draw_overview(Canvas& canvas, const Layout& layout, int left,
                   std::span<const FigureDetector> detectors, BlockColour block_colour) {
    for (std::size_t i = 0; i < detectors.size(); ++i) {
        const int x = left + static_cast<int>(i) % layout.columns * layout.cell;
        const int y = kOverviewTop + static_cast<int>(i) / layout.columns * layout.cell;
        const PixelBox panel{x, y, x + layout.cell - 2, y + layout.cell - 2};
        canvas.fill(panel, kDark);
        draw_detector(canvas, panel, detectors[i], block_colour);
    }
}

template <typename PixelColour>
void draw_close_up(Canvas& canvas, int left, int top, const CloseUp& view,
                   PixelColour pixel_colour) {
    const TrueDetector& truth = view.detector->truth;
    const PixelBox window = window_of(view);
    canvas.fill({left, top, left + kCloseUpSide, top + kCloseUpSide}, kFaintInk);
    for (int y = window.y0; y < window.y1; ++y) {
        for (int x = window.x0; x < window.x1; ++x) {
            if (PixelBox{0, 0, truth.width, truth.height}.contains(x, y)) {
                const int px = left + (x - window.x0) * kZoom;
                const int py = top + (window.y1 - 1 - y) * kZoom;
                canvas.fill({px, py, px + kZoom, py + kZoom},
                            pixel_colour(*view.detector, std::size_t(y) * truth.width + x));
            }
        }
    }
}

void draw_close_ups(Canvas& canvas, const Layout& layout,
                    std::span<const FigureDetector> detectors) {
    const std::vector<CloseUp> views = close_ups(detectors);
    constexpr int kStep = (kWidth - 2 * kMargin) / kMostCloseUps;
    for (std::size_t i = 0; i < views.size(); ++i) {
        const CloseUp& view = views[i];
        const int left = kMargin + static_cast<int>(i) * kStep;
        canvas.text(left, layout.close_up_top - 24,
                    fmt::format("{}, {:+.1f}", view.reason, view.response), kInk);
        canvas.text(left, layout.close_up_top - 12,
                    fmt::format("{} > {}", view.echo->source, view.echo->victim), kFaintInk);
        draw_close_up(canvas, left, layout.close_up_top, view,
                      [](const FigureDetector& detector, std::size_t index) {
                          return response_colour(static_cast<double>(detector.response[index]));
                      });
        draw_close_up(canvas, left, layout.close_up_top + kCloseUpSide + 6, view,
                      [](const FigureDetector& detector, std::size_t index) {
                          return kClassColours[static_cast<std::size_t>(class_of(detector, index))];
                      });
    }
}

void draw_headline(Canvas& canvas, const NightScore& night, const std::string& exposure) {
    canvas.text(kMargin, 16, fmt::format("{}: exposure {}", night.kind, exposure), kInk, 2);
    std::string line = fmt::format("night of {} exposures: ", night.exposures.size());
    constexpr std::array<std::string_view, 4> kShort = {"pixels", "echoes", "area", "slope"};
    for (std::size_t i = 0; i < kShort.size(); ++i) {
        line += fmt::format("{} {} ({})   ", kShort[i], night.figures[i].shown,
                            night.figures[i].met ? "met" : "not met");
    }
    canvas.text(kMargin, 40, line, kInk);
    canvas.text(kMargin, kOverviewTop - 22, "true response", kInk, 2);
    canvas.text(kMargin + kOverviewSide + kGap, kOverviewTop - 22, "the mask against it", kInk, 2);
}

void draw_legend(Canvas& canvas, int top) {
    constexpr int kSwatch = 12;
    constexpr int kRow = 20;
    canvas.text(kMargin, top + 3, "response -20", kInk);
    constexpr int kBarLeft = kMargin + 84;
    constexpr int kBarHalf = 150;
    for (int i = -kBarHalf; i <= kBarHalf; ++i) {
        // The bar is even in the colour's own scale.
        const double level = static_cast<double>(std::abs(i)) / kBarHalf;
        const double strength = 0.5 * std::sinh(level * std::asinh(40.0));
        canvas.fill({kBarLeft + kBarHalf + i, top, kBarLeft + kBarHalf + i + 1, top + kSwatch},
                    response_colour(i < 0 ? -strength : strength));
    }
    canvas.text(kBarLeft + 2 * kBarHalf + 8, top + 3, "+20", kInk);
    int x = kMargin;
    for (std::size_t i = 1; i < kClassColours.size(); ++i) {
        canvas.fill({x, top + kRow, x + kSwatch, top + kRow + kSwatch}, kClassColours[i]);
        canvas.text(x + kSwatch + 6, top + kRow + 3, kClassTexts[i], kInk);
        x += kSwatch + 6 + Canvas::text_width(kClassTexts[i].size()) + 24;
    }
}

}  // namespace

Canvas figure_of(const NightScore& night, const std::string& exposure,
                 std::span<const FigureDetector> detectors) {
    const Layout layout(detectors.size());
    Canvas canvas(kWidth, layout.height, kPage);
    draw_headline(canvas, night, exposure);
    draw_overview(canvas, layout, kMargin, detectors, response_colour_of_block);
    draw_overview(canvas, layout, kMargin + kOverviewSide + kGap, detectors, class_colour_of_block);
    draw_close_ups(canvas, layout, detectors);
    draw_legend(canvas, layout.legend_top);
    return canvas;
}

}  // namespace straymark::score
