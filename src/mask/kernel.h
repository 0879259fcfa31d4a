#pragma once

#include <span>
#include <vector>

#include "artifacts/mark.h"
#include "exposure/digest.h"

namespace straymark {

/// The detection filter D: the measured point-spread function P minus the box of detection's own
/// background subtraction. Turns a predicted signal into the filter's answer; divided by the noise
/// it is the response of docs/conventions.md.
class DetectionKernel {
public:
    /// psf.source != none. background_px: side of the box, normalised; 0: none. A box of even side
    /// reaches one pixel farther down and left.
    DetectionKernel(const Psf& psf, int background_px);

    /// A signal farther away than this (in x or y) does not count.
    [[nodiscard]] int halo() const { return halo_; }
    [[nodiscard]] double root_sum_square() const { return root_sum_square_; }  ///< sqrt(sum P^2)
    /// sum |D| at most: |answer| <= weight_sum * max |signal|.
    [[nodiscard]] double weight_sum() const { return weight_sum_; }
    /// Answer in units of noise: response = answer * scale(noise).
    [[nodiscard]] double scale(double noise_e) const { return 1.0 / (noise_e * root_sum_square_); }

    /// Filter answer over `out.box` to `in`; signal beyond in.box counts as zero. Pixels with
    /// |signal| < cut are left out of the sum with P, so the answer is wrong by at most
    /// cut * weight_sum. `scratch` is reused. Same result however out.box is cut into tiles.
    void answer(const SignalWindow& in, float cut, const SignalWindow& out,
                std::vector<float>& scratch) const;
    /// At least the magnitude of the answer to any signal of this magnitude (all values >= 0): the
    /// sum of both parts of D instead of their difference. Cut as above.
    void answer_bound(const SignalWindow& in, float cut, const SignalWindow& out,
                      std::vector<float>& scratch) const;
    /// Exact filter answer at one pixel; signal beyond in.box counts as zero.
    [[nodiscard]] double answer_at(const SignalWindow& in, int x, int y) const;

private:
    void answer_psf(const SignalWindow& in, float cut, const SignalWindow& out,
                    std::vector<float>& scratch) const;
    void add_box(const SignalWindow& in, float sign, const SignalWindow& out) const;

    int radius_ = 0;  ///< at most 32
    int stride_ = 0;  ///< of a row of turned_, padded with zeros
    int background_px_ = 0;
    int box_below_ = 0, box_above_ = -1;  ///< offsets covered by the box: -box_below .. box_above
    int halo_ = 0;
    double root_sum_square_ = 0.0;
    double weight_sum_ = 0.0;
    std::vector<float> psf_;     ///< P, row-major about its centre
    std::vector<float> turned_;  ///< P turned by 180 degrees, rows padded, for scattering
};

}  // namespace straymark
