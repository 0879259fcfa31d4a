#include "mask/decide.h"

#include <algorithm>
#include <cmath>
#include <optional>
#include <utility>

#include "core/parallel.h"
#include "mask/kernel.h"
#include "mask/tile.h"

namespace straymark {
namespace {

constexpr int kTileSide = 256;

std::vector<PixelBox> tiles_of(int width, int height) {
    std::vector<PixelBox> tiles;
    for (int y = 0; y < height; y += kTileSide) {
        for (int x = 0; x < width; x += kTileSide) {
            tiles.push_back(
                {x, y, std::min(x + kTileSide, width), std::min(y + kTileSide, height)});
        }
    }
    return tiles;
}

std::vector<NoisePatch> noise_patches(const Detector& detector, const DetectorDigest& digest,
                                      double template_noise) {
    std::vector<NoisePatch> patches;
    for (std::size_t a = 0; a < detector.amplifiers.size(); ++a) {
        const Amplifier& amplifier = detector.amplifiers[a];
        const bool known =
            a < digest.amplifiers.size() && digest.amplifiers[a].state == AmplifierState::ok;
        patches.push_back({amplifier.readout.section(), known ? digest.amplifiers[a].noise_adu *
                                                                    amplifier.gain_e_per_adu *
                                                                    std::hypot(1.0, template_noise)
                                                              : 0.0});
    }
    return patches;
}

double noise_at(const std::vector<NoisePatch>& patches, int x, int y) {
    for (const NoisePatch& patch : patches) {
        if (patch.section.contains(x, y)) {
            return patch.noise_e;
        }
    }
    return 0.0;
}

/// Bounds of everything a mark says, errors included.
PixelBox bounds_of(const Mark& mark) {
    PixelBox box;
    if (mark.signal) {
        box = mark.signal->bounds();
    }
    for (const ErrorMode& mode : mark.errors) {
        if (mode.shape) {
            box = box.united(mode.shape->bounds());
        }
    }
    return box;
}

/// For each tile the marks that can reach it, in their order.
std::vector<std::vector<const Mark*>> marks_by_tile(const std::vector<Mark>& marks, int width,
                                                    int height, int halo) {
    const int across = (width + kTileSide - 1) / kTileSide;
    const int down = (height + kTileSide - 1) / kTileSide;
    std::vector<std::vector<const Mark*>> by_tile(static_cast<std::size_t>(across) *
                                                  static_cast<std::size_t>(down));
    for (const Mark& mark : marks) {
        const PixelBox box = bounds_of(mark).grown(halo).intersected({0, 0, width, height});
        if (box.empty()) {
            continue;
        }
        for (int ty = box.y0 / kTileSide; ty <= (box.y1 - 1) / kTileSide; ++ty) {
            for (int tx = box.x0 / kTileSide; tx <= (box.x1 - 1) / kTileSide; ++tx) {
                by_tile[static_cast<std::size_t>(ty) * static_cast<std::size_t>(across) +
                        static_cast<std::size_t>(tx)]
                    .push_back(&mark);
            }
        }
    }
    return by_tile;
}

/// The largest own response of one mark, found by climbing from its brightest pixel.
class PeakFinder {
public:
    PeakFinder(const DetectionKernel& kernel, const std::vector<NoisePatch>& noise, PixelBox whole)
        : kernel_(kernel), noise_(noise), whole_(whole) {}

    MarkOutcome find(const Mark& mark) {
        MarkOutcome outcome;
        const SignalShape* leading = mark.signal           ? mark.signal.get()
                                     : mark.errors.empty() ? nullptr
                                                           : mark.errors.front().shape.get();
        if (leading == nullptr || leading->bounds().empty()) {
            return outcome;
        }
        const SignalWindow window = render(*leading, values_);
        const DetectorPixel start = brightest(window, outcome.peak_e);
        const DetectorPixel peak = climb(window, start);
        outcome.peak = peak;
        const double noise = noise_at(noise_, peak.x, peak.y);
        if (!mark.signal) {
            outcome.peak_e = 0.0;
        }
        if (noise <= 0.0) {
            return outcome;
        }
        const double scale = kernel_.scale(noise);
        const double leading_response = scale * kernel_.answer_at(window, peak.x, peak.y);
        outcome.response = mark.signal ? leading_response : 0.0;
        outcome.response_error = error_at(mark, peak, leading_response, scale);
        return outcome;
    }

private:
    SignalWindow render(const SignalShape& shape, std::vector<float>& values) const {
        const PixelBox box = shape.bounds();
        values.assign(
            static_cast<std::size_t>(box.width()) * static_cast<std::size_t>(box.height()), 0.0F);
        const SignalWindow window{box, values};
        shape.add_to(window, 1.0F);
        return window;
    }

    static DetectorPixel brightest(const SignalWindow& window, double& value) {
        const auto found =
            std::max_element(window.values.begin(), window.values.end(),
                             [](float a, float b) { return std::fabs(a) < std::fabs(b); });
        value = static_cast<double>(*found);
        const auto at = static_cast<int>(found - window.values.begin());
        return {window.box.x0 + at % window.box.width(), window.box.y0 + at / window.box.width()};
    }

    [[nodiscard]] double response_at(const SignalWindow& window, int x, int y) const {
        const double noise = noise_at(noise_, x, y);
        return noise > 0.0 ? std::abs(kernel_.scale(noise) * kernel_.answer_at(window, x, y)) : 0.0;
    }

    [[nodiscard]] DetectorPixel climb(const SignalWindow& window, DetectorPixel at) const {
        constexpr int kMostSteps = 64;
        constexpr std::array<DetectorPixel, 4> kSides = {{{1, 0}, {0, 1}, {-1, 0}, {0, -1}}};
        double best = response_at(window, at.x, at.y);
        // Go on in a direction as long as it rises; done when four in turn do not.
        int refused = 0;
        for (int step = 0; refused < 4 && step < kMostSteps; ++step) {
            const DetectorPixel& side = kSides[static_cast<std::size_t>(step % 4)];
            ++refused;
            while (whole_.contains(at.x + side.x, at.y + side.y)) {
                const double response = response_at(window, at.x + side.x, at.y + side.y);
                if (response <= best) {
                    break;
                }
                best = response;
                at = {at.x + side.x, at.y + side.y};
                refused = 0;
            }
        }
        return at;
    }

    double error_at(const Mark& mark, DetectorPixel at, double own_response, double scale) {
        double variance = 0.0;
        for (const ErrorMode& mode : mark.errors) {
            double response = mode.relative * own_response;
            if (mode.shape && !mode.shape->bounds().empty()) {
                response = scale * kernel_.answer_at(render(*mode.shape, mode_values_), at.x, at.y);
            }
            variance += response * response;
        }
        return std::sqrt(variance);
    }

    const DetectionKernel& kernel_;
    const std::vector<NoisePatch>& noise_;
    PixelBox whole_;
    std::vector<float> values_, mode_values_;
};

void set_bit(DetectorMask& mask, int x, int y, MaskBit bit) {
    MaskPixel& pixel =
        mask.bits[static_cast<std::size_t>(y) * static_cast<std::size_t>(mask.width) +
                  static_cast<std::size_t>(x)];
    pixel = static_cast<MaskPixel>(pixel | value_of(bit));
}

void paint_box(DetectorMask& mask, const PixelBox& box, MaskBit bit) {
    const PixelBox inside = box.intersected({0, 0, mask.width, mask.height});
    for (int y = inside.y0; y < inside.y1; ++y) {
        for (int x = inside.x0; x < inside.x1; ++x) {
            set_bit(mask, x, y, bit);
        }
    }
}

/// Bits that are seen, not predicted.
void paint_seen(const Detector& detector, const DetectorDigest& digest,
                const std::vector<PixelBox>& defects, DetectorMask& mask) {
    for (std::size_t a = 0; a < digest.amplifiers.size(); ++a) {
        const ReadoutGeometry& readout = detector.amplifiers[a].readout;
        for (const ReadoutSpan& span : digest.amplifiers[a].saturated) {
            for (int i = 0; i < span.length; ++i) {
                const DetectorPixel at = readout.detector_from_readout({span.tick + i, span.row});
                set_bit(mask, at.x, at.y, MaskBit::saturated);
            }
        }
        if (digest.amplifiers[a].state == AmplifierState::dead) {
            paint_box(mask, readout.section(), MaskBit::defect);
        }
    }
    for (const PixelRun& run : digest.bleed) {
        paint_box(mask, {run.x0, run.y, run.x0 + run.length, run.y + 1}, MaskBit::bleed);
    }
    for (const PixelBox& box : defects) {
        paint_box(mask, box, MaskBit::defect);
    }
}

void count_unassessed(const DetectorMask& mask, MaskBit bit, ArtifactOutcome& outcome) {
    outcome.unassessed_px =
        std::count_if(mask.bits.begin(), mask.bits.end(),
                      [bit](MaskPixel pixel) { return (pixel & value_of(bit)) != 0; });
}

std::int64_t flagged_in(const DetectorMask& mask, const PixelBox& box, ArtifactBits bits) {
    const auto either = static_cast<MaskPixel>(value_of(bits.positive) | value_of(bits.negative));
    const PixelBox inside = box.intersected({0, 0, mask.width, mask.height});
    std::int64_t count = 0;
    for (int y = inside.y0; y < inside.y1; ++y) {
        const MaskPixel* row = mask.bits.data() + static_cast<std::ptrdiff_t>(y) * mask.width;
        int in_row = 0;
        for (int x = inside.x0; x < inside.x1; ++x) {
            in_row += (row[x] & either) != 0 ? 1 : 0;
        }
        count += in_row;
    }
    return count;
}

/// One artifact over the whole detector.
class ArtifactPainter {
public:
    ArtifactPainter(const DetectionKernel& kernel, const std::vector<NoisePatch>& noise,
                    DetectorMask& mask, int threads)
        : kernel_(kernel), noise_(noise), mask_(mask), threads_(threads) {}

    void paint(const DetectorMarks& marks, ArtifactKind kind, double threshold) {
        ArtifactOutcome& outcome = mask_.outcome[static_cast<std::size_t>(kind)];
        const std::vector<PixelBox> tiles = tiles_of(mask_.width, mask_.height);
        const auto by_tile = marks_by_tile(marks.marks, mask_.width, mask_.height, kernel_.halo());
        std::vector<TileCounts> counts(tiles.size());
        for_each_with_worker<TileWorker>(
            static_cast<int>(tiles.size()), [&] { return TileWorker(kernel_, whole(), noise_); },
            [&](TileWorker& worker, std::size_t i) {
                counts[i] = worker.paint(tiles[i], by_tile[i], marks.faint.get(),
                                         {threshold, bits_of(kind), mask_.bits});
            });
        for (const TileCounts& tile : counts) {
            outcome.flagged_px += tile.flagged;
            outcome.marginal_px += tile.marginal;
            outcome.unassessed_px += tile.unassessed;
        }
    }

    void judge_marks(const DetectorMarks& marks, ArtifactKind kind, double fwhm_px) {
        ArtifactOutcome& outcome = mask_.outcome[static_cast<std::size_t>(kind)];
        outcome.marks.resize(marks.marks.size());
        const int margin = static_cast<int>(std::ceil(fwhm_px));
        for_each_with_worker<PeakFinder>(
            static_cast<int>(marks.marks.size()),
            [&] { return PeakFinder(kernel_, noise_, whole()); },
            [&](PeakFinder& finder, std::size_t i) {
                outcome.marks[i] = finder.find(marks.marks[i]);
                outcome.marks[i].area_px =
                    flagged_in(mask_, bounds_of(marks.marks[i]).grown(margin), bits_of(kind));
            });
    }

private:
    [[nodiscard]] PixelBox whole() const { return {0, 0, mask_.width, mask_.height}; }

    /// body(worker, i) for every i, each worker's buffers serving a share of them.
    template <typename Worker, typename Make, typename Body>
    void for_each_with_worker(int count, const Make& make, const Body& body) {
        const int shares = std::min(count, threads_ * (threads_ > 1 ? 4 : 1));
        parallel_for(shares, threads_, [&](int share) {
            Worker worker = make();
            for (int i = share; i < count; i += shares) {
                body(worker, static_cast<std::size_t>(i));
            }
        });
    }

    const DetectionKernel& kernel_;
    const std::vector<NoisePatch>& noise_;
    DetectorMask& mask_;
    int threads_;
};

}  // namespace

void decide(const Detector& detector, const DetectorDigest& digest,
            const std::array<DetectorMarks, kArtifactKinds>& marks,
            const std::vector<PixelBox>& defects, const DecisionSettings& settings, int threads,
            DetectorMask& mask) {
    mask.width = detector.width;
    mask.height = detector.height;
    mask.bits.assign(static_cast<std::size_t>(mask.width) * static_cast<std::size_t>(mask.height),
                     0);
    mask.outcome = {};
    const std::vector<NoisePatch> noise = noise_patches(detector, digest, settings.template_noise);
    std::optional<DetectionKernel> kernel;
    if (digest.psf.source != PsfSource::none) {
        kernel.emplace(digest.psf, settings.background_px);
    }
    paint_seen(detector, digest, defects, mask);
    for (std::size_t k = 0; k < marks.size(); ++k) {
        const auto kind = static_cast<ArtifactKind>(k);
        if (kernel) {
            ArtifactPainter painter(*kernel, noise, mask, threads);
            painter.paint(marks[k], kind, settings.threshold[k]);
            painter.judge_marks(marks[k], kind, digest.psf.fwhm_px);
        }
        if (!marks[k].regions.empty()) {
            for (const UnassessedRegion& region : marks[k].regions) {
                paint_box(mask, region.box, bits_of(kind).unassessed);
            }
            count_unassessed(mask, bits_of(kind).unassessed, mask.outcome[k]);
        }
    }
}

}  // namespace straymark
