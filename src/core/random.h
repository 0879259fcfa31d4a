#pragma once

#include <array>
#include <cstdint>

namespace straymark {

/// One block of Philox 4x32-10: a bijection of the counter for each key (Salmon et al. 2011, SC11).
std::array<std::uint32_t, 4> philox_block(std::array<std::uint32_t, 4> counter,
                                          std::array<std::uint32_t, 2> key);

/// Counter-based random numbers (Philox 4x32-10, Salmon et al. 2011, SC11): the value depends on
/// seed, stream and counter alone, so any number of threads draws the same numbers.
class RandomStream {
public:
    RandomStream(std::uint64_t seed, std::uint64_t stream);

    std::uint32_t bits();         ///< uniform 32 bits
    double uniform();             ///< uniform in (0, 1), never 0 nor 1
    double normal();              ///< mean 0, variance 1 (Box-Muller)
    double poisson(double mean);  ///< exact for mean < 1000, rounded normal above

private:
    void refill();
    std::array<std::uint32_t, 2> key_{};
    std::array<std::uint32_t, 4> counter_{};
    std::array<std::uint32_t, 4> block_{};
    int used_ = 4;
    bool has_spare_ = false;
    double spare_ = 0.0;
};

}  // namespace straymark
