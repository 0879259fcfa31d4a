#include "core/random.h"

#include <cassert>
#include <cmath>
#include <numbers>

namespace straymark {
namespace {

// Multipliers and Weyl increments of Philox 4x32 (Salmon et al. 2011, table 2 and section 4.3).
constexpr std::uint64_t kMultiplier0 = 0xD2511F53U;
constexpr std::uint64_t kMultiplier1 = 0xCD9E8D57U;
constexpr std::uint32_t kWeyl0 = 0x9E3779B9U;
constexpr std::uint32_t kWeyl1 = 0xBB67AE85U;
constexpr int kRounds = 10;

constexpr double kExactPoissonLimit = 1000.0;
constexpr double kPoissonByProductLimit = 10.0;

/// ln k! by Stirling's series, good to 1e-12 for arguments of 10 or more (the first term left out
/// is 1 / (1188 x^9)); smaller ones are raised to there by the recurrence.
double log_factorial(double k) {
    double raised = k + 1.0;
    double product = 1.0;
    while (raised < 10.0) {
        product *= raised;
        raised += 1.0;
    }
    const double inverse = 1.0 / raised;
    const double square = inverse * inverse;
    const double series =
        inverse * (1.0 / 12.0 - square * (1.0 / 360.0 - square * (1.0 / 1260.0 - square / 1680.0)));
    return (raised - 0.5) * std::log(raised) - raised + 0.5 * std::log(2.0 * std::numbers::pi) +
           series - std::log(product);
}

/// Waiting times (Knuth): as many uniforms as their product stays above exp(-mean).
double poisson_by_product(RandomStream& stream, double mean) {
    const double limit = std::exp(-mean);
    double product = stream.uniform();
    double count = 0.0;
    while (product > limit) {
        product *= stream.uniform();
        count += 1.0;
    }
    return count;
}

/// Transformed rejection with squeeze, algorithm PTRS of Hoermann 1993, Insurance: Mathematics
/// and Economics 12, 39. Valid for mean >= 10.
double poisson_by_rejection(RandomStream& stream, double mean) {
    const double b = 0.931 + 2.53 * std::sqrt(mean);
    const double a = -0.059 + 0.02483 * b;
    const double inverse_alpha = 1.1239 + 1.1328 / (b - 3.4);
    const double squeeze = 0.9277 - 3.6224 / (b - 2.0);
    const double log_mean = std::log(mean);
    for (;;) {
        const double u = stream.uniform() - 0.5;
        const double v = stream.uniform();
        const double us = 0.5 - std::fabs(u);
        const double k = std::floor((2.0 * a / us + b) * u + mean + 0.43);
        if (us >= 0.07 && v <= squeeze) {
            return k;
        }
        if (k < 0.0 || (us < 0.013 && v > us)) {
            continue;
        }
        if (std::log(v * inverse_alpha / (a / (us * us) + b)) <=
            k * log_mean - mean - log_factorial(k)) {
            return k;
        }
    }
}

}  // namespace

std::array<std::uint32_t, 4> philox_block(std::array<std::uint32_t, 4> counter,
                                          std::array<std::uint32_t, 2> key) {
    for (int round = 0; round < kRounds; ++round) {
        const std::uint64_t product0 = kMultiplier0 * counter[0];
        const std::uint64_t product1 = kMultiplier1 * counter[2];
        counter = {static_cast<std::uint32_t>(product1 >> 32U) ^ counter[1] ^ key[0],
                   static_cast<std::uint32_t>(product1),
                   static_cast<std::uint32_t>(product0 >> 32U) ^ counter[3] ^ key[1],
                   static_cast<std::uint32_t>(product0)};
        key[0] += kWeyl0;
        key[1] += kWeyl1;
    }
    return counter;
}

RandomStream::RandomStream(std::uint64_t seed, std::uint64_t stream)
    : key_{static_cast<std::uint32_t>(seed), static_cast<std::uint32_t>(seed >> 32U)},
      counter_{0, 0, static_cast<std::uint32_t>(stream),
               static_cast<std::uint32_t>(stream >> 32U)} {}

void RandomStream::refill() {
    block_ = philox_block(counter_, key_);
    used_ = 0;
    if (++counter_[0] == 0) {
        ++counter_[1];
    }
}

std::uint32_t RandomStream::bits() {
    if (used_ == 4) {
        refill();
    }
    return block_[static_cast<std::size_t>(used_++)];
}

double RandomStream::uniform() {
    // 52 bits at the middles of 2^52 equal steps: never 0 nor 1.
    const std::uint64_t high = bits();
    const std::uint64_t low = bits();
    const std::uint64_t word = ((high << 32U) | low) >> 12U;
    return (static_cast<double>(word) + 0.5) * 0x1.0p-52;
}

double RandomStream::normal() {
    if (has_spare_) {
        has_spare_ = false;
        return spare_;
    }
    const double radius = std::sqrt(-2.0 * std::log(uniform()));
    const double angle = 2.0 * std::numbers::pi * uniform();
    spare_ = radius * std::sin(angle);
    has_spare_ = true;
    return radius * std::cos(angle);
}

double RandomStream::poisson(double mean) {
    assert(mean >= 0.0 && std::isfinite(mean));
    if (mean < kPoissonByProductLimit) {
        return mean > 0.0 ? poisson_by_product(*this, mean) : 0.0;
    }
    if (mean < kExactPoissonLimit) {
        return poisson_by_rejection(*this, mean);
    }
    return std::fmax(0.0, std::nearbyint(mean + std::sqrt(mean) * normal()));
}

}  // namespace straymark
