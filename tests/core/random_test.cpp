#include "core/random.h"

#include <algorithm>
#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <cstdint>
#include <set>
#include <vector>

namespace straymark {
namespace {

using Block = std::array<std::uint32_t, 4>;

/// Largest distance of a sample's distribution from `law` (Kolmogorov and Smirnov), times sqrt(n).
template <typename Law>
double scaled_distance(std::vector<double> sample, const Law& law) {
    std::sort(sample.begin(), sample.end());
    const auto n = static_cast<double>(sample.size());
    double largest = 0.0;
    for (std::size_t i = 0; i < sample.size(); ++i) {
        const double p = law(sample[i]);
        largest = std::max({largest, std::fabs(p - static_cast<double>(i) / n),
                            std::fabs(p - static_cast<double>(i + 1) / n)});
    }
    return largest * std::sqrt(n);
}

// The limiting law exceeds this once in a million samples: 2 exp(-2 d^2) = 1e-6.
constexpr double kDistanceLimit = 2.69;
// Six standard errors: once in five hundred million.
constexpr double kSigmas = 6.0;

double normal_law(double x) {
    return 0.5 * std::erfc(-x / std::sqrt(2.0));
}

}  // namespace

TEST_CASE("blocks agree with the published known answers") {
    // Random123 1.14, file kat_vectors, "philox4x32 10".
    CHECK(philox_block({0, 0, 0, 0}, {0, 0}) ==
          Block{0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8});
    constexpr std::uint32_t kOnes = 0xffffffff;
    CHECK(philox_block({kOnes, kOnes, kOnes, kOnes}, {kOnes, kOnes}) ==
          Block{0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd});
    CHECK(
        philox_block({0x243f6a88, 0x85a308d3, 0x13198a2e, 0x03707344}, {0xa4093822, 0x299f31d0}) ==
        Block{0xd16cfe09, 0x94fdcceb, 0x5001e420, 0x24126ea1});
}

TEST_CASE("a stream counts blocks below its own number") {
    RandomStream stream(0xa4093822299f31d0U, 0x0123456789abcdefU);
    for (std::uint32_t block = 0; block < 3; ++block) {
        const Block expected =
            philox_block({block, 0, 0x89abcdef, 0x01234567}, {0x299f31d0, 0xa4093822});
        for (const std::uint32_t word : expected) {
            CHECK(stream.bits() == word);
        }
    }
}

TEST_CASE("streams and seeds do not share numbers") {
    std::set<std::uint32_t> seen;
    for (std::uint64_t seed = 0; seed < 20; ++seed) {
        for (std::uint64_t stream = 0; stream < 20; ++stream) {
            seen.insert(RandomStream(seed, stream).bits());
        }
    }
    // 400 words of 32 bits coincide with probability 2e-5.
    CHECK(seen.size() == 400);
}

TEST_CASE("uniform numbers are uniform and never reach 0 or 1") {
    RandomStream stream(7, 1);
    std::vector<double> sample(200000);
    for (double& value : sample) {
        value = stream.uniform();
    }
    CHECK(*std::min_element(sample.begin(), sample.end()) > 0.0);
    CHECK(*std::max_element(sample.begin(), sample.end()) < 1.0);
    CHECK(scaled_distance(sample, [](double x) { return x; }) < kDistanceLimit);
}

TEST_CASE("normal numbers follow the normal law, pairs and squares too") {
    RandomStream stream(7, 2);
    std::vector<double> sample(200000);
    for (double& value : sample) {
        value = stream.normal();
    }
    CHECK(scaled_distance(sample, normal_law) < kDistanceLimit);
    double neighbours = 0.0;
    double squares = 0.0;
    for (std::size_t i = 1; i < sample.size(); ++i) {
        neighbours += sample[i - 1] * sample[i];
        squares += (sample[i - 1] * sample[i - 1] - 1.0) * (sample[i] * sample[i] - 1.0);
    }
    const double root_n = std::sqrt(static_cast<double>(sample.size()));
    CHECK(std::fabs(neighbours) / root_n < kSigmas);     // each term has variance 1
    CHECK(std::fabs(squares) / root_n / 2.0 < kSigmas);  // each term has variance 4
}

TEST_CASE("Poisson counts have the mean, the variance and the third moment of the law") {
    const double mean = GENERATE(0.3, 3.0, 9.9, 10.1, 40.0, 999.0, 1001.0, 50000.0);
    RandomStream stream(7, static_cast<std::uint64_t>(mean * 10.0));
    constexpr int kDraws = 100000;
    double sum = 0.0;
    double squares = 0.0;
    double cubes = 0.0;
    for (int i = 0; i < kDraws; ++i) {
        const double count = stream.poisson(mean);
        REQUIRE(count >= 0.0);
        REQUIRE(count == std::floor(count));
        const double d = count - mean;
        sum += d;
        squares += d * d;
        cubes += d * d * d;
    }
    // Central moments of the Poisson law: m2 = m, m3 = m, m4 = m + 3 m^2, m6 = m + 25 m^2 + 15 m^3.
    const double root_n = std::sqrt(static_cast<double>(kDraws));
    CHECK(std::fabs(sum / kDraws) < kSigmas * std::sqrt(mean) / root_n);
    // Above 1000 counts are normal and rounded: rounding adds 1/12 to the variance.
    const double rounding = mean > 1000.0 ? 1.0 / 12.0 : 0.0;
    CHECK(std::fabs(squares / kDraws - mean - rounding) <
          kSigmas * std::sqrt(mean + 2.0 * mean * mean) / root_n);
    if (mean < 1000.0) {
        const double spread = std::sqrt(mean + 25.0 * mean * mean + 15.0 * mean * mean * mean);
        CHECK(std::fabs(cubes / kDraws - mean) < kSigmas * spread / root_n);
    }
}

TEST_CASE("the small Poisson counts come in the law's proportions") {
    const double mean = GENERATE(0.7, 12.0);
    RandomStream stream(11, static_cast<std::uint64_t>(mean * 10.0));
    constexpr int kDraws = 100000;
    constexpr int kBins = 30;
    std::array<double, kBins> counts{};
    for (int i = 0; i < kDraws; ++i) {
        const auto count = static_cast<std::size_t>(stream.poisson(mean));
        if (count < kBins) {
            counts[count] += 1.0;
        }
    }
    double p = std::exp(-mean);
    for (int k = 0; k < kBins; ++k) {
        const double expected = kDraws * p;
        if (expected > 50.0) {  // enough for the normal limit at six sigma
            CHECK(std::fabs(counts[k] - expected) < kSigmas * std::sqrt(expected * (1.0 - p)));
        }
        p *= mean / (k + 1);
    }
}

}  // namespace straymark
