#include "exposure/moffat_fit.h"

#include <Eigen/Cholesky>
#include <Eigen/Core>
#include <algorithm>
#include <cmath>
#include <limits>

#include "core/robust.h"

namespace straymark {
namespace {

using Eigen::Matrix3d;
using Eigen::Matrix4d;
using Eigen::Vector3d;
using Eigen::Vector4d;
using Matrix34d = Eigen::Matrix<double, 3, 4>;

constexpr double kHuber = 3.0;
/// Pixels are trusted to this part of the profile's own value: no star is exactly the profile.
constexpr double kProfileError = 0.02;
constexpr double kLeastBeta = 1.1;
/// From here on a Moffat profile is a Gaussian to within a per cent.
constexpr double kMostBeta = 30.0;
constexpr int kMostSteps = 12;
constexpr double kConvergedCost = 1e-4;
constexpr double kMostDamping = 1e6;

struct Parameters {
    MoffatShape shape;
    std::vector<StarFit> stars;
};

/// One finite pixel of a stamp.
struct Sample {
    double i = 0.0;
    double j = 0.0;
    double value = 0.0;
    double error = 1.0;
};

/// The normal equations in blocks: s for a star's own parameters, t for the common ones.
struct StarBlock {
    Matrix3d h_ss = Matrix3d::Zero();
    Matrix34d h_st = Matrix34d::Zero();
    Vector3d g_s = Vector3d::Zero();
};
struct NormalEquations {
    double cost = 0.0;
    Matrix4d h_tt = Matrix4d::Zero();
    Vector4d g_t = Vector4d::Zero();
    std::vector<StarBlock> stars;
};

/// The finite pixels of a stamp within a radius of the star, and those beyond.
struct StampSamples {
    std::vector<Sample> within, beyond;
};

StampSamples samples_of(const StarStamp& stamp, double radius_px) {
    StampSamples samples;
    const int reach = stamp.radius;
    for (int j = -reach; j <= reach; ++j) {
        for (int i = -reach; i <= reach; ++i) {
            const float value = stamp.at(i, j);
            const double squared =
                (i - stamp.dx) * (i - stamp.dx) + (j - stamp.dy) * (j - stamp.dy);
            if (std::isfinite(value)) {
                auto& part = squared <= radius_px * radius_px ? samples.within : samples.beyond;
                part.push_back({double(i), double(j), double(value), 1.0});
            }
        }
    }
    return samples;
}

double variance_of(const PixelNoise& noise, double signal) {
    const double positive = std::max(signal, 0.0);
    return noise.noise_adu * noise.noise_adu + positive / noise.gain_e_per_adu +
           kProfileError * kProfileError * positive * positive;
}

class Problem {
public:
    Problem(std::span<const StarStamp> stamps, double fwhm_px, double radius_px)
        : stamps_(stamps), quadrature_(PixelQuadrature::for_fwhm(fwhm_px)) {
        for (const StarStamp& stamp : stamps) {
            samples_.push_back(samples_of(stamp, radius_px));
        }
    }

    /// Sets the pixels' errors to those that these parameters predict.
    void set_errors(const Parameters& at) {
        for (std::size_t s = 0; s < stamps_.size(); ++s) {
            for (Sample& sample : samples_[s].within) {
                sample.error =
                    std::sqrt(variance_of(stamps_[s].noise, profile(at, at.stars[s], sample)));
            }
        }
    }

    /// Sets the stars' backgrounds to what lies beyond them under these parameters.
    void set_backgrounds(Parameters& at) const {
        std::vector<double> beyond;
        for (std::size_t s = 0; s < stamps_.size(); ++s) {
            beyond.clear();
            for (const Sample& sample : samples_[s].beyond) {
                beyond.push_back(sample.value - profile(at, at.stars[s], sample));
            }
            at.stars[s].background_adu =
                beyond.empty() ? 0.0 : median_in_place(std::span<double>(beyond));
        }
    }

    [[nodiscard]] NormalEquations build(const Parameters& at) const {
        NormalEquations equations;
        equations.stars.resize(stamps_.size());
        for (std::size_t s = 0; s < stamps_.size(); ++s) {
            add_star(s, at, equations);
        }
        return equations;
    }

    [[nodiscard]] double misfit(std::size_t s, const Parameters& at) const {
        double sum = 0.0;
        const StarFit& star = at.stars[s];
        for (const Sample& sample : samples_[s].within) {
            const double residual =
                (sample.value - star.background_adu - profile(at, star, sample)) / sample.error;
            sum += std::min(9.0, residual * residual);
        }
        return sum / std::max<double>(1.0, double(samples_[s].within.size()));
    }

private:
    [[nodiscard]] double profile(const Parameters& at, const StarFit& star,
                                 const Sample& sample) const {
        return star.amplitude_adu *
               quadrature_.value(at.shape, sample.i - star.dx, sample.j - star.dy);
    }

    void add_star(std::size_t s, const Parameters& at, NormalEquations& equations) const {
        const StarFit& star = at.stars[s];
        StarBlock& block = equations.stars[s];
        for (const Sample& sample : samples_[s].within) {
            const MoffatPixel pixel =
                quadrature_.derivatives(at.shape, sample.i - star.dx, sample.j - star.dy);
            const double error = sample.error;
            const double residual =
                (sample.value - star.background_adu - star.amplitude_adu * pixel.value) / error;
            const double size = std::abs(residual);
            const double huber = size > kHuber ? kHuber / size : 1.0;
            equations.cost += size > kHuber ? kHuber * (2.0 * size - kHuber) : size * size;

            const Vector3d d_star = Vector3d(pixel.value, -star.amplitude_adu * pixel.d_dx,
                                             -star.amplitude_adu * pixel.d_dy) /
                                    error;
            const Vector4d d_shape =
                Eigen::Map<const Vector4d>(pixel.d_shape.data()) * (star.amplitude_adu / error);
            block.h_ss.noalias() += huber * d_star * d_star.transpose();
            block.h_st.noalias() += huber * d_star * d_shape.transpose();
            block.g_s += huber * residual * d_star;
            equations.h_tt.noalias() += huber * d_shape * d_shape.transpose();
            equations.g_t += huber * residual * d_shape;
        }
    }

    std::span<const StarStamp> stamps_;
    PixelQuadrature quadrature_;
    std::vector<StampSamples> samples_;
};

template <typename Matrix>
Matrix damped(const Matrix& matrix, double damping) {
    Matrix result = matrix;
    result.diagonal() *= 1.0 + damping;
    result.diagonal().array() += std::numeric_limits<double>::min();
    return result;
}

/// One damped step from `at`; the result may be invalid.
Parameters step_from(const Parameters& at, const NormalEquations& equations, double damping) {
    Matrix4d reduced = damped(equations.h_tt, damping);
    Vector4d right = equations.g_t;
    for (const StarBlock& star : equations.stars) {
        const Eigen::LDLT<Matrix3d> own(damped(star.h_ss, damping));
        reduced.noalias() -= star.h_st.transpose() * own.solve(star.h_st);
        right.noalias() -= star.h_st.transpose() * own.solve(star.g_s);
    }
    const Vector4d d_shape = Eigen::LDLT<Matrix4d>(reduced).solve(right);
    Parameters next = at;
    next.shape.a += d_shape[0];
    next.shape.b += d_shape[1];
    next.shape.c += d_shape[2];
    next.shape.beta = std::clamp(at.shape.beta + d_shape[3], kLeastBeta, kMostBeta);
    for (std::size_t s = 0; s < at.stars.size(); ++s) {
        const StarBlock& star = equations.stars[s];
        const Vector3d own =
            Eigen::LDLT<Matrix3d>(damped(star.h_ss, damping)).solve(star.g_s - star.h_st * d_shape);
        next.stars[s].amplitude_adu += own[0];
        next.stars[s].dx += own[1];
        next.stars[s].dy += own[2];
    }
    return next;
}

bool finite(const Parameters& parameters) {
    return parameters.shape.valid() &&
           std::all_of(parameters.stars.begin(), parameters.stars.end(), [](const StarFit& star) {
               return std::isfinite(star.amplitude_adu + star.dx + star.dy);
           });
}

/// Levenberg-Marquardt with the pixels' errors and the backgrounds held at those of the first
/// parameters, so that the costs compare.
bool descend(Problem& problem, Parameters& parameters) {
    problem.set_errors(parameters);
    problem.set_backgrounds(parameters);
    NormalEquations equations = problem.build(parameters);
    double damping = 1e-3;
    for (int k = 0; k < kMostSteps && damping < kMostDamping; ++k) {
        Parameters next = step_from(parameters, equations, damping);
        if (!finite(next)) {
            damping *= 10.0;
            continue;
        }
        NormalEquations there = problem.build(next);
        if (!(there.cost <= equations.cost)) {
            damping *= 10.0;
            continue;
        }
        const bool done = equations.cost - there.cost <= kConvergedCost * equations.cost;
        parameters = std::move(next);
        equations = std::move(there);
        damping *= 0.1;
        if (done) {
            return true;
        }
    }
    return false;
}

}  // namespace

MoffatFit fit_moffat(std::span<const StarStamp> stamps, const MoffatShape& start,
                     double radius_px) {
    Problem problem(stamps, start.fwhm(), radius_px);
    Parameters parameters{start, {}};
    for (const StarStamp& stamp : stamps) {
        parameters.stars.push_back({stamp.flux_adu / start.volume(), stamp.dx, stamp.dy, 0.0, 0.0});
    }
    const bool converged = descend(problem, parameters);
    for (std::size_t s = 0; s < stamps.size(); ++s) {
        parameters.stars[s].misfit = problem.misfit(s, parameters);
    }
    return {converged, parameters.shape, std::move(parameters.stars)};
}

}  // namespace straymark
