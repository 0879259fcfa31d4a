#include "io/compressed_image.h"

#include <algorithm>
#include <bit>
#include <cassert>
#include <cstdint>
#include <fmt/format.h>
#include <new>
#include <stdexcept>
#include <vector>
#include <zlib.h>

#include "io/byte_order.h"

namespace straymark::io {
namespace {

// Short and wide: readers that want rows expand little else, and each tile is worth its dictionary.
constexpr int kRowsInTile = 64;
constexpr std::size_t kDescriptorBytes = 2 * sizeof(std::int32_t);

/// One gzip stream after another, in memory that is used again.
class GzipEncoder {
public:
    GzipEncoder() {
        constexpr int kGzipFormat = 16 + MAX_WBITS;  // zlib.h, deflateInit2
        constexpr int kMemoryLevel = 9;
        if (deflateInit2(&stream_, Z_BEST_SPEED, Z_DEFLATED, kGzipFormat, kMemoryLevel,
                         Z_DEFAULT_STRATEGY) != Z_OK) {
            throw std::bad_alloc();
        }
    }
    ~GzipEncoder() { deflateEnd(&stream_); }
    GzipEncoder(const GzipEncoder&) = delete;
    GzipEncoder& operator=(const GzipEncoder&) = delete;

    /// Appends the stream to `out`; returns its length.
    std::size_t append(std::vector<std::byte>& bytes, std::vector<std::byte>& out) {
        deflateReset(&stream_);
        const std::size_t before = out.size();
        out.resize(before + deflateBound(&stream_, bytes.size()));
        stream_.next_in = reinterpret_cast<Bytef*>(bytes.data());
        stream_.avail_in = static_cast<uInt>(bytes.size());
        stream_.next_out = reinterpret_cast<Bytef*>(out.data() + before);
        stream_.avail_out = static_cast<uInt>(out.size() - before);
        [[maybe_unused]] const int status = deflate(&stream_, Z_FINISH);
        assert(status == Z_STREAM_END);  // deflateBound promises room
        out.resize(out.size() - stream_.avail_out);
        return out.size() - before;
    }

private:
    z_stream stream_{};
};

/// The values' most significant bytes first, then the next, and so on (FITS 4.0, section 10.4.2).
void shuffle(std::span<const float> pixels, std::vector<std::byte>& out) {
    const std::size_t n = pixels.size();
    out.resize(n * sizeof(float));
    for (std::size_t i = 0; i < n; ++i) {
        const auto bits = std::bit_cast<std::uint32_t>(pixels[i]);
        out[i] = static_cast<std::byte>(bits >> 24U);
        out[n + i] = static_cast<std::byte>(bits >> 16U);
        out[2 * n + i] = static_cast<std::byte>(bits >> 8U);
        out[3 * n + i] = static_cast<std::byte>(bits);
    }
}

struct Tiles {
    std::vector<std::byte> bytes;  ///< descriptors, then the heap
    int count = 0;
    std::size_t longest = 0;
};

Tiles compress(std::span<const float> pixels, int width, int height) {
    Tiles tiles;
    tiles.count = (height + kRowsInTile - 1) / kRowsInTile;
    const std::size_t heap = tiles.count * kDescriptorBytes;
    tiles.bytes.resize(heap);
    GzipEncoder encoder;
    std::vector<std::byte> shuffled;
    for (int tile = 0; tile < tiles.count; ++tile) {
        const int rows = std::min(kRowsInTile, height - tile * kRowsInTile);
        const auto first = static_cast<std::size_t>(tile) * kRowsInTile * width;
        shuffle(pixels.subspan(first, static_cast<std::size_t>(rows) * width), shuffled);
        const std::size_t offset = tiles.bytes.size() - heap;
        const std::size_t length = encoder.append(shuffled, tiles.bytes);
        std::byte* descriptor = tiles.bytes.data() + tile * kDescriptorBytes;
        store_big_endian(descriptor, static_cast<std::int32_t>(length));
        store_big_endian(descriptor + sizeof(std::int32_t), static_cast<std::int32_t>(offset));
        tiles.longest = std::max(tiles.longest, length);
    }
    return tiles;
}

}  // namespace

FitsUnit compressed_float_unit(const std::string& name, std::span<const float> pixels, int width,
                               int height, const std::string& unit) {
    assert(pixels.size() == static_cast<std::size_t>(width) * height);
    // Descriptors have 32 bits; a detector of 2^28 pixels stays below in any case.
    assert(pixels.size() <= std::size_t{1} << 28U);
    Tiles tiles = compress(pixels, width, height);
    const std::size_t rows = tiles.count;
    HeaderCards cards =
        binary_table_cards(kDescriptorBytes, rows, tiles.bytes.size() - rows * kDescriptorBytes, 1);
    cards.add_text("TTYPE1", "COMPRESSED_DATA");
    cards.add_text("TFORM1", fmt::format("1PB({})", tiles.longest));
    cards.add_logical("ZIMAGE", true, "an image, compressed in tiles");
    cards.add_text("ZTENSION", "IMAGE");
    cards.add_integer("ZBITPIX", -32);
    cards.add_integer("ZNAXIS", 2);
    cards.add_integer("ZNAXIS1", width);
    cards.add_integer("ZNAXIS2", height);
    cards.add_integer("ZPCOUNT", 0);
    cards.add_integer("ZGCOUNT", 1);
    cards.add_integer("ZTILE1", width);
    cards.add_integer("ZTILE2", std::min(kRowsInTile, height));
    cards.add_text("ZCMPTYPE", "GZIP_2", "lossless");
    cards.add_text("ZQUANTIZ", "NONE", "values as they are");
    cards.add_text("EXTNAME", name);
    cards.add_text("BUNIT", unit);
    return finished_unit(std::move(cards), std::move(tiles.bytes));
}

}  // namespace straymark::io
