#pragma once

#include <bit>
#include <concepts>
#include <cstddef>
#include <cstdint>
#include <cstring>
#include <type_traits>

/// FITS numbers are big-endian.

namespace straymark::io {

template <std::size_t Bytes>
using UnsignedOf = std::conditional_t<
    Bytes == 1, std::uint8_t,
    std::conditional_t<Bytes == 2, std::uint16_t,
                       std::conditional_t<Bytes == 4, std::uint32_t, std::uint64_t>>>;

template <std::unsigned_integral T>
constexpr T byte_swapped(T value) {
    if constexpr (sizeof(T) == 2) {
        return __builtin_bswap16(value);
    } else if constexpr (sizeof(T) == 4) {
        return __builtin_bswap32(value);
    } else if constexpr (sizeof(T) == 8) {
        return __builtin_bswap64(value);
    } else {
        return value;
    }
}

/// The number of type T whose big-endian bytes begin at `from` (any alignment).
template <typename T>
T load_big_endian(const std::byte* from) {
    UnsignedOf<sizeof(T)> raw;
    std::memcpy(&raw, from, sizeof raw);
    if constexpr (std::endian::native == std::endian::little) {
        raw = byte_swapped(raw);
    }
    return std::bit_cast<T>(raw);
}

/// Writes `value` as big-endian bytes at `to` (any alignment).
template <typename T>
void store_big_endian(std::byte* to, T value) {
    auto raw = std::bit_cast<UnsignedOf<sizeof(T)>>(value);
    if constexpr (std::endian::native == std::endian::little) {
        raw = byte_swapped(raw);
    }
    std::memcpy(to, &raw, sizeof raw);
}

}  // namespace straymark::io
