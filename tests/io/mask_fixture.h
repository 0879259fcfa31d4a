#pragma once

#include <cstdint>
#include <filesystem>
#include <random>
#include <string>
#include <vector>

#include "mask/mask_file.h"

/// What the tests of mask files share: masks of many textures and tables with awkward content.

namespace straymark::test {

/// A folder of its own that goes away with its owner.
class ScratchFolder {
public:
    ScratchFolder() {
        std::string name = (std::filesystem::temp_directory_path() / "straymark.XXXXXX").string();
        path_ = ::mkdtemp(name.data());
    }
    ~ScratchFolder() {
        std::error_code ignored;
        std::filesystem::remove_all(path_, ignored);
    }
    ScratchFolder(const ScratchFolder&) = delete;
    ScratchFolder& operator=(const ScratchFolder&) = delete;
    [[nodiscard]] std::string file(const std::string& name) const {
        return (path_ / name).string();
    }
    [[nodiscard]] std::string path() const { return path_.string(); }

private:
    std::filesystem::path path_;
};

/// One line of pixels; `texture` chooses among empty, sparse, runs, few bits, dense and extreme.
inline void fill_line(std::span<std::int16_t> line, int texture, std::mt19937& random) {
    const auto below = [&random](unsigned n) { return static_cast<int>(random() % n); };
    std::size_t at = 0;
    while (at < line.size()) {
        int value = 0;
        std::size_t length = 1;
        switch (texture) {
            case 0:
                length = line.size();
                break;
            case 1:  // single pixels in long gaps, across the 4095 of an instruction
                value = below(2) == 0 ? 0 : 1 << below(15);
                length = value == 0 ? static_cast<std::size_t>(below(9000)) : 1;
                break;
            case 2:  // runs of any length
                value = below(3) == 0 ? 0 : below(32768);
                length = static_cast<std::size_t>(1 + below(6000));
                break;
            case 3:  // a few bits, short runs
                value = 1 << below(15);
                length = static_cast<std::size_t>(1 + below(4));
                break;
            case 4:  // every pixel anything
                value = below(32768);
                break;
            default:  // steps about the largest that fits one instruction
                value = 16000 + (below(3) - 1) * (4094 + below(3));
                break;
        }
        length = std::min(length, line.size() - at);
        std::fill_n(line.begin() + static_cast<std::ptrdiff_t>(at), length,
                    static_cast<std::int16_t>(value));
        at += length;
    }
}
inline constexpr int kTextures = 6;

/// `height` lines, textures in turn.
inline DetectorMask textured_mask(int width, int height, unsigned seed) {
    std::mt19937 random(seed);
    DetectorMask mask;
    mask.width = width;
    mask.height = height;
    mask.bits.resize(static_cast<std::size_t>(width) * static_cast<std::size_t>(height));
    for (int y = 0; y < height; ++y) {
        const auto first = static_cast<std::size_t>(y) * static_cast<std::size_t>(width);
        fill_line(std::span(mask.bits).subspan(first, static_cast<std::size_t>(width)),
                  y % kTextures, random);
    }
    return mask;
}

}  // namespace straymark::test
