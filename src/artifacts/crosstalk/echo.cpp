#include "artifacts/crosstalk/echo.h"

#include <algorithm>
#include <cmath>
#include <cstdlib>

namespace straymark::crosstalk {
namespace {

/// Indices i of a run, first <= i < end, whose echo falls on a data pixel inside the window, and
/// the window's element of the first of them with the step from one to the next.
struct RunPlacement {
    int first = 0;
    int end = 0;
    std::ptrdiff_t element = 0;
    std::ptrdiff_t step = 0;
};

/// Narrows [first, end) to the i with low <= start + i * step < high; step is -1, 0 or 1.
void narrow(int start, int step, int low, int high, int& first, int& end) {
    if (step > 0) {
        first = std::max(first, low - start);
        end = std::min(end, high - start);
    } else if (step < 0) {
        first = std::max(first, start - high + 1);
        end = std::min(end, start - low + 1);
    } else if (start < low || start >= high) {
        end = first;
    }
}

RunPlacement place(const PixelBox& box, const EchoPath& path, const SourceRun& run, int lag_ticks) {
    const ReadoutGeometry& victim = *path.victim;
    RunPlacement placed{0, run.length, 0, 0};
    if (run.row < victim.first_row() || run.row >= victim.end_row()) {
        placed.end = 0;
        return placed;
    }
    const int tick = run.tick + path.offset_ticks + lag_ticks;
    narrow(tick, 1, victim.first_tick(), victim.end_tick(), placed.first, placed.end);
    const DetectorPixel start = victim.detector_from_readout({tick, run.row});
    narrow(start.x, victim.tick_dx(), box.x0, box.x1, placed.first, placed.end);
    narrow(start.y, victim.tick_dy(), box.y0, box.y1, placed.first, placed.end);
    const int x = start.x + placed.first * victim.tick_dx() - box.x0;
    const int y = start.y + placed.first * victim.tick_dy() - box.y0;
    placed.element = static_cast<std::ptrdiff_t>(y) * box.width() + x;
    placed.step = static_cast<std::ptrdiff_t>(victim.tick_dy()) * box.width() + victim.tick_dx();
    return placed;
}

void add_scaled(const SignalWindow& window, const RunPlacement& at, const float* values,
                float scale) {
    std::ptrdiff_t element = at.element;
    for (int i = at.first; i < at.end; ++i, element += at.step) {
        window.values[static_cast<std::size_t>(element)] += scale * values[i];
    }
}

void add_bent(const SignalWindow& window, const RunPlacement& at, const float* values,
              const Bend& bend, double scale) {
    std::ptrdiff_t element = at.element;
    for (int i = at.first; i < at.end; ++i, element += at.step) {
        window.values[static_cast<std::size_t>(element)] +=
            static_cast<float>(scale * bend(static_cast<double>(values[i])));
    }
}

}  // namespace

EchoTerms EchoTerms::estimate(const Pair& pair, const PairExtras* extras, double victim_gain) {
    EchoTerms terms;
    terms.linear = static_cast<double>(pair.coefficient) * victim_gain;
    terms.clipped_linear = terms.linear;
    if (extras == nullptr) {
        return terms;
    }
    if (extras->bend) {
        terms.bend = &*extras->bend;
        terms.bend_scale = victim_gain;
        terms.clipped_bend_scale = victim_gain;
    }
    if (extras->clipped) {
        terms.clipped_linear = extras->clipped->coefficient * victim_gain;
        terms.clipped_bend_scale = 0.0;
    }
    for (const Lag& lag : extras->lags) {
        terms.lags.push_back({lag.ticks, lag.coefficient * victim_gain, lag.error * victim_gain});
    }
    return terms;
}

double EchoTerms::bound(double level_adu) const {
    double sum = std::max(std::abs(linear), std::abs(clipped_linear)) * level_adu;
    for (const Lag& lag : lags) {
        sum += std::abs(lag.coefficient) * level_adu;
    }
    if (bend != nullptr && level_adu > bend->onset_adu) {
        const double x = level_adu - bend->onset_adu;
        const double scale = std::max(std::abs(bend_scale), std::abs(clipped_bend_scale));
        sum += scale * x * (std::abs(bend->c1) + x * (std::abs(bend->c2) + x * std::abs(bend->c3)));
    }
    return sum;
}

void add_echo(const SignalWindow& window, const EchoPath& path, const SourceImage& source,
              const SourceRun& run, const EchoTerms& terms, double scale) {
    const float* values = source.values.data() + run.first_value;
    const double linear = run.clipped ? terms.clipped_linear : terms.linear;
    const double bend_scale = run.clipped ? terms.clipped_bend_scale : terms.bend_scale;
    const bool bent = terms.bend != nullptr && bend_scale != 0.0 &&
                      static_cast<double>(run.peak_adu) > terms.bend->onset_adu;
    if (linear != 0.0 || bent) {
        const RunPlacement at = place(window.box, path, run, 0);
        if (linear != 0.0) {
            add_scaled(window, at, values, static_cast<float>(linear * scale));
        }
        if (bent) {
            add_bent(window, at, values, *terms.bend, bend_scale * scale);
        }
    }
    for (const Lag& lag : terms.lags) {
        add_scaled(window, place(window.box, path, run, lag.ticks), values,
                   static_cast<float>(lag.coefficient * scale));
    }
}

void add_echo_variance(const SignalWindow& window, const EchoPath& path, const SourceImage& source,
                       const SourceRun& run, double spread_e) {
    const float* values = source.values.data() + run.first_value;
    const RunPlacement at = place(window.box, path, run, 0);
    const auto spread = static_cast<float>(spread_e);
    std::ptrdiff_t element = at.element;
    for (int i = at.first; i < at.end; ++i, element += at.step) {
        const float error = spread * values[i];
        window.values[static_cast<std::size_t>(element)] += error * error;
    }
}

EchoShape::EchoShape(std::shared_ptr<const SourceImage> source, const SourceBlob& blob,
                     EchoPath path, EchoTerms terms)
    : source_(std::move(source)), blob_(blob), path_(path), terms_(std::move(terms)) {
    int earliest = 0;
    int latest = 0;
    for (const Lag& lag : terms_.lags) {
        earliest = std::min(earliest, lag.ticks);
        latest = std::max(latest, lag.ticks);
    }
    const ReadoutGeometry& victim = *path_.victim;
    const int tick0 = std::max(blob.tick0 + path_.offset_ticks + earliest, victim.first_tick());
    const int tick1 = std::min(blob.tick1 + path_.offset_ticks + latest, victim.end_tick());
    const int row0 = std::max(blob.row0, victim.first_row());
    const int row1 = std::min(blob.row1, victim.end_row());
    whole_ = tick0 == blob.tick0 + path_.offset_ticks + earliest &&
             tick1 == blob.tick1 + path_.offset_ticks + latest && row0 == blob.row0 &&
             row1 == blob.row1;
    if (tick0 >= tick1 || row0 >= row1) {
        return;  // falls beside the data: no pixel, empty bounds
    }
    const DetectorPixel a = victim.detector_from_readout({tick0, row0});
    const DetectorPixel b = victim.detector_from_readout({tick1 - 1, row1 - 1});
    bounds_ = {std::min(a.x, b.x), std::min(a.y, b.y), std::max(a.x, b.x) + 1,
               std::max(a.y, b.y) + 1};
}

void EchoShape::add_to(const SignalWindow& window, float scale) const {
    for (const std::uint32_t index : source_->runs_of(blob_)) {
        add_echo(window, path_, *source_, source_->runs[index], terms_, static_cast<double>(scale));
    }
}

double EchoShape::total_e() const {
    if (whole_ && terms_.lags.empty() && terms_.bend == nullptr &&
        terms_.linear == terms_.clipped_linear) {
        return terms_.linear * blob_.total_adu;
    }
    if (bounds_.empty()) {
        return 0.0;
    }
    std::vector<float> values(static_cast<std::size_t>(bounds_.width()) *
                              static_cast<std::size_t>(bounds_.height()));
    add_to({bounds_, values}, 1.0F);
    double sum = 0.0;
    for (const float value : values) {
        sum += static_cast<double>(value);
    }
    return sum;
}

}  // namespace straymark::crosstalk
