#include "mask/tile.h"

#include <algorithm>
#include <cmath>
#include <utility>

namespace straymark {
namespace {

/// Signals this far under what matters are left out of the first, fast sum; pixels whose verdict
/// that could change are then decided exactly. Fractions of the threshold.
constexpr double kSignalSlack = 0.1;
constexpr double kSpreadSlack = 0.02;

std::size_t area(const PixelBox& box) {
    return box.empty()
               ? 0
               : static_cast<std::size_t>(box.width()) * static_cast<std::size_t>(box.height());
}

}  // namespace

TileWorker::TileWorker(const DetectionKernel& kernel, PixelBox whole, std::vector<NoisePatch> noise)
    : kernel_(kernel), whole_(whole), noise_(std::move(noise)) {}

void TileWorker::reset(const PixelBox& tile, bool any_unmeasured) {
    tile_ = tile;
    reach_ = tile.grown(kernel_.halo()).intersected(whole_);
    any_unmeasured_ = any_unmeasured;
    for (Layer* layer :
         {&measured_, &measured_faint_, &spread_, &unmeasured_, &unmeasured_faint_}) {
        if (any_unmeasured_ || (layer != &unmeasured_ && layer != &unmeasured_faint_)) {
            layer->signal.assign(area(reach_), 0.0F);
            layer->answer.resize(area(tile_));
        }
        layer->in = {reach_, layer->signal};
        layer->out = {tile_, layer->answer};
    }
    pool_.clear();
    rendered_.clear();
    modes_.clear();
}

SignalWindow TileWorker::window(const Rendered& rendered) const {
    // The pool is only read through this window.
    auto* first = const_cast<float*>(pool_.data()) + rendered.first;
    return {rendered.box, {first, area(rendered.box)}};
}

std::size_t TileWorker::render(const SignalShape& shape) {
    const PixelBox box = shape.bounds().intersected(reach_);
    const std::size_t first = pool_.size();
    pool_.resize(first + area(box), 0.0F);
    rendered_.push_back({box, first});
    if (!box.empty()) {
        shape.add_to({box, std::span(pool_).subspan(first)}, 1.0F);
    }
    return rendered_.size() - 1;
}

void TileWorker::add(const Rendered& rendered, Layer& layer, float scale, bool magnitude) {
    const PixelBox& box = rendered.box;
    const float* from = pool_.data() + rendered.first;
    for (int y = box.y0; y < box.y1; ++y) {
        float* to = layer.signal.data() +
                    static_cast<std::ptrdiff_t>(y - reach_.y0) * reach_.width() +
                    (box.x0 - reach_.x0);
        for (int x = 0; x < box.width(); ++x, ++from) {
            to[x] += scale * (magnitude ? std::fabs(*from) : *from);
        }
    }
}

void TileWorker::render_marks(std::span<const Mark* const> marks) {
    for (const Mark* mark : marks) {
        std::size_t signal = 0;
        if (mark->signal) {
            signal = render(*mark->signal);
            add(rendered_[signal], mark->measured ? measured_ : unmeasured_, 1.0F, false);
        }
        for (const ErrorMode& mode : mark->errors) {
            const double relative = mode.shape ? 1.0 : mode.relative;
            const std::size_t shape = mode.shape ? render(*mode.shape) : signal;
            add(rendered_[shape], spread_, static_cast<float>(relative), true);
            modes_.push_back({mode.group, mark->measured, relative, shape});
        }
    }
}

bool TileWorker::could_matter(double threshold, double quietest_noise_e) const {
    const auto bound =
        static_cast<float>(threshold / (kernel_.scale(quietest_noise_e) * kernel_.weight_sum()));
    unsigned reached = 0;
    for (std::size_t i = 0; i < spread_.signal.size(); ++i) {
        float most = std::fabs(measured_.signal[i]) + 2.0F * spread_.signal[i];
        if (any_unmeasured_) {
            most += std::fabs(unmeasured_.signal[i]);
        }
        reached |= most >= bound ? 1U : 0U;
    }
    return reached != 0;
}

std::pair<double, double> TileWorker::variances_at(int x, int y) const {
    double measured = kernel_.answer_at(measured_faint_.in, x, y);
    double unmeasured = any_unmeasured_ ? kernel_.answer_at(unmeasured_faint_.in, x, y) : 0.0;
    measured *= measured;
    unmeasured *= unmeasured;
    const int halo = kernel_.halo();
    // Modes of one group are neighbours more often than not, but not always: sum group by group.
    std::vector<std::pair<std::uint64_t, std::pair<double, bool>>> groups;
    for (const RenderedMode& mode : modes_) {
        const Rendered& rendered = rendered_[mode.rendered];
        if (!rendered.box.grown(halo).contains(x, y)) {
            continue;
        }
        const double answer = mode.relative * kernel_.answer_at(window(rendered), x, y);
        const auto found = std::find_if(groups.begin(), groups.end(),
                                        [&](const auto& g) { return g.first == mode.group; });
        if (found == groups.end()) {
            groups.push_back({mode.group, {answer, mode.measured}});
        } else {
            found->second.first += answer;
        }
    }
    for (const auto& [group, sum] : groups) {
        (sum.second ? measured : unmeasured) += sum.first * sum.first;
    }
    return {measured, unmeasured};
}

TileWorker::Decision TileWorker::decide_exactly(int x, int y, double scale, double threshold,
                                                double error_bound) const {
    const double measured = kernel_.answer_at(measured_.in, x, y) * scale;
    const double unmeasured =
        any_unmeasured_ ? kernel_.answer_at(unmeasured_.in, x, y) * scale : 0.0;
    const double response = measured + unmeasured;
    Decision decision;
    decision.flagged = std::abs(response) >= threshold;
    decision.negative = response < 0.0;
    const bool clear = std::abs(response) + 2.0 * error_bound < threshold;
    if (!any_unmeasured_ && (decision.flagged || clear)) {
        return decision;
    }
    const auto [measured_variance, unmeasured_variance] = variances_at(x, y);
    const double two_measured = 2.0 * scale * std::sqrt(measured_variance);
    const double two_unmeasured = 2.0 * scale * std::sqrt(unmeasured_variance);
    const double two_all = 2.0 * scale * std::sqrt(measured_variance + unmeasured_variance);
    const bool measured_reaches = std::abs(measured) + two_measured >= threshold;
    const bool all_reach = std::abs(response) + two_all >= threshold;
    decision.unassessed =
        any_unmeasured_ && (std::abs(unmeasured) + two_unmeasured >= threshold ||
                            (!decision.flagged && all_reach && !measured_reaches));
    decision.marginal =
        !decision.flagged && !decision.unassessed && (measured_reaches || all_reach);
    return decision;
}

void TileWorker::add_faint(const FaintSum& faint) {
    faint.add_to({measured_.in, unmeasured_.in, measured_faint_.in, unmeasured_faint_.in});
    // The faint windows were filled with variances.
    const auto fold = [this](std::vector<float>& variances) {
        if (std::all_of(variances.begin(), variances.end(), [](float v) { return v == 0.0F; })) {
            return;
        }
        for (std::size_t i = 0; i < spread_.signal.size(); ++i) {
            variances[i] = std::sqrt(variances[i]);
            spread_.signal[i] += variances[i];
        }
    };
    fold(measured_faint_.signal);
    if (any_unmeasured_) {
        fold(unmeasured_faint_.signal);
    }
}

double TileWorker::quietest_noise() const {
    double quietest = 0.0;
    for (const NoisePatch& patch : noise_) {
        if (patch.noise_e > 0.0 && !patch.section.intersected(tile_).empty()) {
            quietest = quietest > 0.0 ? std::min(quietest, patch.noise_e) : patch.noise_e;
        }
    }
    return quietest;
}

void TileWorker::answer_all(double threshold, double quietest_noise_e) {
    const double per_e = kernel_.weight_sum() * kernel_.scale(quietest_noise_e);
    const auto signal_cut = static_cast<float>(kSignalSlack * threshold / per_e);
    const auto spread_cut = static_cast<float>(kSpreadSlack * threshold / per_e);
    kernel_.answer(measured_.in, signal_cut, measured_.out, scratch_);
    if (any_unmeasured_) {
        kernel_.answer(unmeasured_.in, signal_cut, unmeasured_.out, scratch_);
    }
    kernel_.answer_bound(spread_.in, spread_cut, spread_.out, scratch_);
}

bool TileWorker::stretch_could_matter(int x0, int x1, int y, float limit) const {
    const auto first =
        static_cast<std::size_t>(y - tile_.y0) * static_cast<std::size_t>(tile_.width()) +
        static_cast<std::size_t>(x0 - tile_.x0);
    const auto count = static_cast<std::size_t>(x1 - x0);
    unsigned reached = 0;
    for (std::size_t i = first; i < first + count; ++i) {
        float most = std::fabs(measured_.answer[i]) + 2.0F * spread_.answer[i];
        if (any_unmeasured_) {
            most += std::fabs(unmeasured_.answer[i]);
        }
        reached |= most >= limit ? 1U : 0U;
    }
    return reached != 0;
}

TileWorker::Decision TileWorker::decide_pixel(int x, int y, double scale, double threshold) const {
    const auto at =
        static_cast<std::size_t>(y - tile_.y0) * static_cast<std::size_t>(tile_.width()) +
        static_cast<std::size_t>(x - tile_.x0);
    double answer = static_cast<double>(measured_.answer[at]);
    if (any_unmeasured_) {
        answer += static_cast<double>(unmeasured_.answer[at]);
    }
    const double response = scale * answer;
    const double spread = scale * static_cast<double>(spread_.answer[at]);
    const double slack = (any_unmeasured_ ? 2.0 : 1.0) * kSignalSlack * threshold;
    if (std::abs(response) + slack + 2.0 * (spread + kSpreadSlack * threshold) < threshold) {
        return {};
    }
    if (!any_unmeasured_ && std::abs(response) >= threshold + slack) {
        return {true, response < 0.0, false, false};
    }
    return decide_exactly(x, y, scale, threshold, spread + kSpreadSlack * threshold);
}

void TileWorker::paint_stretch(int x0, int x1, int y, double scale, const PaintRule& rule,
                               TileCounts& counts) const {
    for (int x = x0; x < x1; ++x) {
        const Decision decision = decide_pixel(x, y, scale, rule.threshold);
        MaskPixel set = 0;
        if (decision.flagged) {
            set = value_of(decision.negative ? rule.bits.negative : rule.bits.positive);
            ++counts.flagged;
        }
        if (decision.marginal) {
            set = static_cast<MaskPixel>(set | value_of(MaskBit::marginal));
            ++counts.marginal;
        }
        if (decision.unassessed) {
            set = static_cast<MaskPixel>(set | value_of(rule.bits.unassessed));
            ++counts.unassessed;
        }
        if (set != 0) {
            MaskPixel& pixel =
                rule.mask[static_cast<std::size_t>(y) * static_cast<std::size_t>(whole_.width()) +
                          static_cast<std::size_t>(x)];
            pixel = static_cast<MaskPixel>(pixel | set);
        }
    }
}

TileCounts TileWorker::paint_patch(const NoisePatch& patch, const PaintRule& rule) const {
    constexpr int kStretch = 32;
    TileCounts counts;
    const PixelBox part = patch.section.intersected(tile_);
    if (part.empty() || !(patch.noise_e > 0.0)) {
        return counts;
    }
    const double scale = kernel_.scale(patch.noise_e);
    // Below this, signal and errors with all that their cuts left out miss the threshold.
    const double left_out = (any_unmeasured_ ? 2.0 : 1.0) * kSignalSlack + 2.0 * kSpreadSlack;
    const auto limit = static_cast<float>(rule.threshold * (1.0 - left_out) / scale);
    for (int y = part.y0; y < part.y1; ++y) {
        for (int x0 = part.x0; x0 < part.x1; x0 += kStretch) {
            const int x1 = std::min(x0 + kStretch, part.x1);
            if (stretch_could_matter(x0, x1, y, limit)) {
                paint_stretch(x0, x1, y, scale, rule, counts);
            }
        }
    }
    return counts;
}

TileCounts TileWorker::paint(const PixelBox& tile, std::span<const Mark* const> marks,
                             const FaintSum* faint, const PaintRule& rule) {
    TileCounts counts;
    if (marks.empty() && faint == nullptr) {
        return counts;
    }
    const bool unmeasured =
        (faint != nullptr && faint->any_unmeasured()) ||
        std::any_of(marks.begin(), marks.end(), [](const Mark* mark) { return !mark->measured; });
    reset(tile, unmeasured);
    const double quietest = quietest_noise();
    if (quietest == 0.0) {
        return counts;
    }
    if (faint != nullptr) {
        add_faint(*faint);
    }
    render_marks(marks);
    if (!could_matter(rule.threshold, quietest)) {
        return counts;
    }
    answer_all(rule.threshold, quietest);
    for (const NoisePatch& patch : noise_) {
        counts += paint_patch(patch, rule);
    }
    return counts;
}

}  // namespace straymark
