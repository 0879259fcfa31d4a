#include "io/fits_pixels.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstddef>
#include <cstdint>
#include <limits>
#include <type_traits>
#include <vector>

#include "io/byte_order.h"

namespace straymark::io {
namespace {

// Small enough to stay in the second-level cache between the read and the conversion.
constexpr std::size_t kChunkBytes = 1 << 16;

/// How stored values become physical ones.
struct Scaling {
    double scale = 1.0;
    double zero = 0.0;
    std::optional<std::int64_t> blank;
};

template <typename Stored>
void convert(const std::byte* bytes, std::span<float> out, const Scaling& scaling) {
    // 8 and 16-bit integers are exact in float, and so is adding a whole BZERO of that size.
    constexpr bool kSmall = std::is_integral_v<Stored> && sizeof(Stored) <= 2;
    const auto zero = static_cast<float>(scaling.zero);
    const bool whole = scaling.zero == std::floor(scaling.zero) && std::fabs(zero) <= 65536.0F;
    if (kSmall && scaling.scale == 1.0 && whole) {
        for (std::size_t i = 0; i < out.size(); ++i) {
            out[i] = static_cast<float>(load_big_endian<Stored>(bytes + i * sizeof(Stored))) + zero;
        }
    } else {
        for (std::size_t i = 0; i < out.size(); ++i) {
            out[i] = static_cast<float>(scaling.zero +
                                        scaling.scale * static_cast<double>(load_big_endian<Stored>(
                                                            bytes + i * sizeof(Stored))));
        }
    }
    if constexpr (std::is_integral_v<Stored>) {
        if (scaling.blank) {
            for (std::size_t i = 0; i < out.size(); ++i) {
                if (static_cast<std::int64_t>(
                        load_big_endian<Stored>(bytes + i * sizeof(Stored))) == *scaling.blank) {
                    out[i] = std::numeric_limits<float>::quiet_NaN();
                }
            }
        }
    }
}

using Converter = void (*)(const std::byte*, std::span<float>, const Scaling&);

Converter converter_for(int bitpix) {
    switch (bitpix) {
        case 8:
            return convert<std::uint8_t>;
        case 16:
            return convert<std::int16_t>;
        case 32:
            return convert<std::int32_t>;
        case 64:
            return convert<std::int64_t>;
        case -32:
            return convert<float>;
        default:
            return convert<double>;
    }
}

}  // namespace

void read_pixels(const InputFile& file, const FitsHdu& hdu, const PixelBox& box,
                 std::span<float> out) {
    assert(hdu.kind == HduKind::image && hdu.axes.size() == 2 && !box.empty());
    assert(box.x0 >= 0 && box.y0 >= 0 && box.x1 <= hdu.axes[0] && box.y1 <= hdu.axes[1]);
    assert(out.size() ==
           static_cast<std::size_t>(box.width()) * static_cast<std::size_t>(box.height()));
    const Converter convert_pixels = converter_for(hdu.bitpix);
    const Scaling scaling{hdu.scale, hdu.zero, hdu.blank};
    const std::int64_t pixel_bytes = hdu.pixel_bytes();
    const std::int64_t width = hdu.axes[0];
    std::vector<std::byte> chunk(kChunkBytes);
    const std::size_t most = kChunkBytes / static_cast<std::size_t>(pixel_bytes);
    // Whole rows follow each other without a gap and are read as one.
    const bool whole_rows = box.width() == width;
    const std::size_t run = whole_rows ? out.size() : static_cast<std::size_t>(box.width());
    for (int y = box.y0; !out.empty(); ++y) {
        std::int64_t offset = hdu.data_offset + (y * width + box.x0) * pixel_bytes;
        for (std::size_t left = run; left > 0;) {
            const std::size_t count = std::min(left, most);
            const std::span<std::byte> raw =
                std::span(chunk).first(count * static_cast<std::size_t>(pixel_bytes));
            file.read_at(offset, raw);
            convert_pixels(raw.data(), out.first(count), scaling);
            out = out.subspan(count);
            offset += static_cast<std::int64_t>(raw.size());
            left -= count;
        }
    }
}

}  // namespace straymark::io
