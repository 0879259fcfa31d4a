#include "mask/kernel.h"

#include <algorithm>
#include <cassert>
#include <cmath>

namespace straymark {
namespace {

/// out[q + e] += in[q] * kernel[e] for every |in[q]| >= cut; out is in grown by the radius. Sums
/// run in the order of q, so no vector width and no tiling changes a bit.
#if defined(__x86_64__) && defined(__GNUC__) && !defined(__clang__) && \
    !defined(__SANITIZE_THREAD__) && !defined(__SANITIZE_ADDRESS__)
__attribute__((target_clones("avx2", "default")))
#endif
void scatter(const float* in, int width, int height, float cut, const float* kernel, int side,
             float* out, int out_width) {
    for (int y = 0; y < height; ++y) {
        for (int x = 0; x < width; ++x) {
            const float value = in[static_cast<std::ptrdiff_t>(y) * width + x];
            if (!(std::fabs(value) >= cut) || value == 0.0F) {
                continue;
            }
            for (int ky = 0; ky < side; ++ky) {
                float* to = out + static_cast<std::ptrdiff_t>(y + ky) * out_width + x;
                const float* row = kernel + static_cast<std::ptrdiff_t>(ky) * side;
                for (int kx = 0; kx < side; ++kx) {
                    to[kx] += value * row[kx];
                }
            }
        }
    }
}

}  // namespace

DetectionKernel::DetectionKernel(const Psf& psf, int background_px)
    : radius_(psf.radius),
      background_px_(background_px),
      psf_(psf.values),
      turned_(psf.values.rbegin(), psf.values.rend()) {
    assert(psf.source != PsfSource::none);
    assert(psf_.size() == static_cast<std::size_t>((2 * radius_ + 1) * (2 * radius_ + 1)));
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
    const PixelBox padded = in.box.grown(radius_);
    const int side = 2 * radius_ + 1;
    scratch.assign(
        static_cast<std::size_t>(padded.width()) * static_cast<std::size_t>(padded.height()), 0.0F);
    scatter(in.values.data(), in.box.width(), in.box.height(), cut, turned_.data(), side,
            scratch.data(), padded.width());
    const PixelBox shared = out.box.intersected(padded);
    std::fill(out.values.begin(), out.values.end(), 0.0F);
    for (int y = shared.y0; y < shared.y1; ++y) {
        const auto from =
            static_cast<std::ptrdiff_t>(y - padded.y0) * padded.width() + (shared.x0 - padded.x0);
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
    double sum = 0.0;
    for (int qy = near.y0; qy < near.y1; ++qy) {
        const float* row = row_of(qy);
        const float* weights =
            psf_.data() + static_cast<std::ptrdiff_t>(qy - y + radius_) * side + (radius_ - x);
        float row_sum = 0.0F;
        for (int qx = near.x0; qx < near.x1; ++qx) {
            row_sum += row[qx] * weights[qx];
        }
        sum += static_cast<double>(row_sum);
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
