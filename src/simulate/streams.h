#pragma once

#include <cassert>
#include <cstdint>

/// Every random number of a simulated night comes from one seed and a stream that says what the
/// number is for, so that neither the order of the work nor the number of threads can change it.

namespace straymark::simulate {

enum class Purpose : std::uint8_t {
    detector = 1,
    channel,
    coupling,
    field,
    listing,
    aim,
    pixel_response,
    photons,
    cosmic_rays,
    bias,
    read_noise,
    product,
};

/// The stream of one purpose at up to three indices (say exposure, detector, row).
/// Preconditions: first < 2^14, second < 2^22, third < 2^22.
constexpr std::uint64_t stream_of(Purpose purpose, int first = 0, int second = 0, int third = 0) {
    assert(first >= 0 && first < (1 << 14) && second >= 0 && second < (1 << 22) && third >= 0 &&
           third < (1 << 22));
    return (static_cast<std::uint64_t>(purpose) << 58U) |
           (static_cast<std::uint64_t>(first) << 44U) |
           (static_cast<std::uint64_t>(second) << 22U) | static_cast<std::uint64_t>(third);
}

}  // namespace straymark::simulate
