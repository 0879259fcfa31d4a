#pragma once

#include <bit>
#include <cstdint>
#include <cstring>
#include <filesystem>
#include <fmt/format.h>
#include <fstream>
#include <span>
#include <stdexcept>
#include <stdlib.h>
#include <string>
#include <type_traits>
#include <vector>

#include "support/temporary_folder.h"

/// Small FITS files for tests, byte by byte as FITS 4.0 says, without any library.

namespace straymark::test {

/// A card: the value as it shall stand in the file ("42", "'text'", "T").
inline std::string card(const std::string& keyword, const std::string& value) {
    return fmt::format("{:<80}", fmt::format("{:<8}= {:>20}", keyword, value));
}
inline std::string text_card(const std::string& keyword, const std::string& text) {
    return card(keyword, fmt::format("'{:<8}'", text));
}
inline std::string padded(std::string bytes, char fill) {
    constexpr std::size_t kBlock = 2880;
    bytes.resize((bytes.size() + kBlock - 1) / kBlock * kBlock, fill);
    return bytes;
}
inline std::string header_bytes(const std::vector<std::string>& cards) {
    std::string bytes;
    for (const std::string& one : cards) {
        bytes += one;
    }
    return padded(bytes + fmt::format("{:<80}", "END"), ' ');
}

template <typename T>
constexpr int bitpix_of() {
    return static_cast<int>(sizeof(T)) * (std::is_floating_point_v<T> ? -8 : 8);
}

template <typename T>
std::string big_endian(std::span<const T> values) {
    std::string bytes(values.size() * sizeof(T), '\0');
    for (std::size_t i = 0; i < values.size(); ++i) {
        char raw[sizeof(T)];
        std::memcpy(raw, &values[i], sizeof(T));
        for (std::size_t b = 0; b < sizeof(T); ++b) {
            bytes[i * sizeof(T) + b] = raw[sizeof(T) - 1 - b];
        }
    }
    return bytes;
}

/// Builds a file HDU by HDU.
class FitsBuilder {
public:
    /// A primary HDU without data, with these cards.
    explicit FitsBuilder(const std::vector<std::string>& cards = {}) {
        std::vector<std::string> all{card("SIMPLE", "T"), card("BITPIX", "8"), card("NAXIS", "0"),
                                     card("EXTEND", "T")};
        all.insert(all.end(), cards.begin(), cards.end());
        bytes_ = header_bytes(all);
    }
    /// A primary HDU that is an image.
    template <typename T>
    static FitsBuilder primary_image(int width, int height, const std::vector<T>& values,
                                     const std::vector<std::string>& cards = {}) {
        FitsBuilder builder;
        builder.bytes_.clear();
        builder.append(card("SIMPLE", "T"), width, height, values, cards);
        return builder;
    }
    /// An image extension.
    template <typename T>
    FitsBuilder& image(const std::string& name, int width, int height, const std::vector<T>& values,
                       const std::vector<std::string>& cards = {}) {
        std::vector<std::string> all{card("PCOUNT", "0"), card("GCOUNT", "1"),
                                     text_card("EXTNAME", name)};
        all.insert(all.end(), cards.begin(), cards.end());
        append(text_card("XTENSION", "IMAGE"), width, height, values, all);
        return *this;
    }
    [[nodiscard]] const std::string& bytes() const { return bytes_; }

private:
    template <typename T>
    void append(const std::string& first, int width, int height, const std::vector<T>& values,
                const std::vector<std::string>& cards) {
        if (values.size() != static_cast<std::size_t>(width) * static_cast<std::size_t>(height)) {
            throw std::logic_error("a test image of the wrong size");
        }
        std::vector<std::string> all{first, card("BITPIX", std::to_string(bitpix_of<T>())),
                                     card("NAXIS", "2"), card("NAXIS1", std::to_string(width)),
                                     card("NAXIS2", std::to_string(height))};
        all.insert(all.end(), cards.begin(), cards.end());
        bytes_ += header_bytes(all);
        bytes_ += padded(big_endian(std::span<const T>(values)), '\0');
    }

    std::string bytes_;
};

}  // namespace straymark::test
