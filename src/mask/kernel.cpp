#include "mask/kernel.h"

#include <algorithm>
#include <array>
#include <cassert>
#include <cmath>
#include <limits>

namespace straymark {
namespace {

constexpr int kLanes = 16;  ///< rows of weights are padded to whole groups of this many

int padded(int side) {
    return (side + kLanes - 1) / kLanes * kLanes;
}

/// One copy of a hot loop for each width of vectors. All of them do the same additions in the same
/// order (no contraction, no reduction), so no machine changes a bit.
#if defined(__x86_64__) && defined(__GNUC__) && !defined(__clang__) && \
    !defined(__SANITIZE_THREAD__) && !defined(__SANITIZE_ADDRESS__)
#define STRAYMARK_EACH_VECTOR_WIDTH __attribute__((target_clones("avx512f", "avx2", "default")))
#else
#define STRAYMARK_EACH_VECTOR_WIDTH
#endif

/// Does any of `count` values reach the cut in magnitude?
STRAYMARK_EACH_VECTOR_WIDTH
bool any_reaches(const float* values, int count, float cut) {
    unsigned reached = 0;
    for (int i = 0; i < count; ++i) {
        reached |= std::fabs(values[i]) >= cut ? 1U : 0U;
    }
    return reached != 0;
}

/// out[q + e] += value * weights[e] for one source pixel q; rows of weights are padded with zeros.
STRAYMARK_EACH_VECTOR_WIDTH
void scatter_one(float value, const float* weights, int side, int stride, float* out,
                 int out_width) {
    for (int ky = 0; ky < side; ++ky) {
        float* to = out + static_cast<std::ptrdiff_t>(ky) * out_width;
        const float* row = weights + static_cast<std::ptrdiff_t>(ky) * stride;
        for (int group = 0; group < stride; group += kLanes) {
            for (int k = 0; k < kLanes; ++k) {
                to[group + k] += value * row[group + k];
            }
        }
    }
}

/// Scatters every pixel with |in| >= cut, row by row.
void scatter(const float* in, int width, int height, float cut, const float* weights, int side,
             int stride, float* out, int out_width) {
    constexpr int kStretch = 32;
    const float least = std::max(cut, std::numeric_limits<float>::min());
    for (int y = 0; y < height; ++y) {
        const float* row = in + static_cast<std::ptrdiff_t>(y) * width;
        for (int x0 = 0; x0 < width; x0 += kStretch) {
            const int x1 = std::min(x0 + kStretch, width);
            if (!any_reaches(row + x0, x1 - x0, least)) {
                continue;
            }
            for (int x = x0; x < x1; ++x) {
                if (std::fabs(row[x]) >= least) {
                    scatter_one(row[x], weights, side, stride,
                                out + static_cast<std::ptrdiff_t>(y) * out_width + x, out_width);
                }
            }
        }
    }
}

/// sums[k] += values[k] * weights[k]
STRAYMARK_EACH_VECTOR_WIDTH
void accumulate(float* sums, const float* values, const float* weights, int count) {
    for (int k = 0; k < count; ++k) {
        sums[k] += values[k] * weights[k];
    }
}

}  // namespace

DetectionKernel::DetectionKernel(const Psf& psf, int background_px)
    : radius_(psf.radius), background_px_(background_px), psf_(psf.values) {
    const int side = 2 * radius_ + 1;
    assert(psf.source != PsfSource::none);
    assert(psf_.size() == static_cast<std::size_t>(side) * static_cast<std::size_t>(side));
    stride_ = padded(side);
    turned_.assign(static_cast<std::size_t>(side) * static_cast<std::size_t>(stride_), 0.0F);
    for (int y = 0; y < side; ++y) {
        for (int x = 0; x < side; ++x) {
            turned_[static_cast<std::size_t>(y) * static_cast<std::size_t>(stride_) +
                    static_cast<std::size_t>(x)] =
                psf_[psf_.size() - 1 - static_cast<std::size_t>(y * side + x)];
        }
    }
    double sum_square = 0.0;
    for (const float value : psf_) {
        sum_square += static_cast<double>(value) * static_cast<double>(value);
        weight_sum_ += std::abs(static_cast<double>(value));
    }
    root_sum_square_ = std::sqrt(sum_square);
    halo_ = radius_;
    if (background_px_ > 0) {
        box_below_ = background_px_ / 2;
        box_above_ = background_px_ - 1 - box_below_;
        halo_ = std::max(halo_, box_below_);
        weight_sum_ += 1.0;
    }
}

void DetectionKernel::answer(const SignalWindow& in, float cut, const SignalWindow& out,
                             std::vector<float>& scratch) const {
    answer_psf(in, cut, out, scratch);
    if (background_px_ > 0) {
        add_box(in, -1.0F, out);
    }
}

void DetectionKernel::answer_bound(const SignalWindow& in, float cut, const SignalWindow& out,
                                   std::vector<float>& scratch) const {
    answer_psf(in, cut, out, scratch);
    if (background_px_ > 0) {
        add_box(in, 1.0F, out);
    }
}

void DetectionKernel::answer_psf(const SignalWindow& in, float cut, const SignalWindow& out,
                                 std::vector<float>& scratch) const {
    const PixelBox reached = in.box.grown(radius_);
    const int side = 2 * radius_ + 1;
    const int width = reached.width() + (stride_ - side);  // padding writes zeros beyond the end
    scratch.assign(static_cast<std::size_t>(width) * static_cast<std::size_t>(reached.height()),
                   0.0F);
    scatter(in.values.data(), in.box.width(), in.box.height(), cut, turned_.data(), side, stride_,
            scratch.data(), width);
    const PixelBox shared = out.box.intersected(reached);
    std::fill(out.values.begin(), out.values.end(), 0.0F);
    for (int y = shared.y0; y < shared.y1; ++y) {
        const auto from =
            static_cast<std::ptrdiff_t>(y - reached.y0) * width + (shared.x0 - reached.x0);
        const auto to = static_cast<std::ptrdiff_t>(y - out.box.y0) * out.box.width() +
                        (shared.x0 - out.box.x0);
        std::copy_n(scratch.begin() + from, shared.width(), out.values.begin() + to);
    }
}

void DetectionKernel::add_box(const SignalWindow& in, float sign, const SignalWindow& out) const {
    const int width = in.box.width();
    const int height = in.box.height();
    // Summed-area table with a leading row and column of zeros.
    const auto stride = static_cast<std::size_t>(width) + 1;
    std::vector<double> sums(stride * (static_cast<std::size_t>(height) + 1), 0.0);
    for (int y = 0; y < height; ++y) {
        double row = 0.0;
        for (int x = 0; x < width; ++x) {
            row += static_cast<double>(
                in.values[static_cast<std::size_t>(y) * static_cast<std::size_t>(width) +
                          static_cast<std::size_t>(x)]);
            const auto at =
                (static_cast<std::size_t>(y) + 1) * stride + static_cast<std::size_t>(x) + 1;
            sums[at] = sums[at - stride] + row;
        }
    }
    const double area = static_cast<double>(background_px_) * background_px_;
    const auto sum_before = [&](int x, int y) {
        const auto cx = static_cast<std::size_t>(std::clamp(x - in.box.x0, 0, width));
        const auto cy = static_cast<std::size_t>(std::clamp(y - in.box.y0, 0, height));
        return sums[cy * stride + cx];
    };
    for (int y = out.box.y0; y < out.box.y1; ++y) {
        for (int x = out.box.x0; x < out.box.x1; ++x) {
            const int x0 = x - box_below_;
            const int x1 = x + box_above_ + 1;
            const int y0 = y - box_below_;
            const int y1 = y + box_above_ + 1;
            const double sum =
                sum_before(x1, y1) - sum_before(x0, y1) - sum_before(x1, y0) + sum_before(x0, y0);
            out.values[static_cast<std::size_t>(y - out.box.y0) *
                           static_cast<std::size_t>(out.box.width()) +
                       static_cast<std::size_t>(x - out.box.x0)] +=
                sign * static_cast<float>(sum / area);
        }
    }
}

double DetectionKernel::answer_at(const SignalWindow& in, int x, int y) const {
    const int side = 2 * radius_ + 1;
    const auto row_of = [&](int qy) {
        return in.values.data() + static_cast<std::ptrdiff_t>(qy - in.box.y0) * in.box.width() -
               in.box.x0;
    };
    const PixelBox near =
        PixelBox{x - radius_, y - radius_, x + radius_ + 1, y + radius_ + 1}.intersected(in.box);
    // Column by column, then across: an order of additions that vectors keep.
    constexpr int kWidest = 4 * kLanes + 1;
    std::array<float, kWidest> columns{};
    const int width = std::max(near.width(), 0);
    assert(width <= kWidest);
    for (int qy = near.y0; qy < near.y1; ++qy) {
        accumulate(columns.data(), row_of(qy) + near.x0,
                   psf_.data() + static_cast<std::ptrdiff_t>(qy - y + radius_) * side +
                       (near.x0 - x + radius_),
                   width);
    }
    double sum = 0.0;
    for (int k = 0; k < width; ++k) {
        sum += static_cast<double>(columns[static_cast<std::size_t>(k)]);
    }
    if (background_px_ > 0) {
        const PixelBox box =
            PixelBox{x - box_below_, y - box_below_, x + box_above_ + 1, y + box_above_ + 1}
                .intersected(in.box);
        double total = 0.0;
        for (int qy = box.y0; qy < box.y1; ++qy) {
            const float* row = row_of(qy);
            for (int qx = box.x0; qx < box.x1; ++qx) {
                total += static_cast<double>(row[qx]);
            }
        }
        sum -= total / (static_cast<double>(background_px_) * background_px_);
    }
    return sum;
}

}  // namespace straymark
