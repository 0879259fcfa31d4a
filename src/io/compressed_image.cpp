#include "io/compressed_image.h"

#include <array>
#include <cassert>
#include <cstdlib>
#include <cstring>
#include <fitsio.h>
#include <fmt/format.h>
#include <memory>
#include <vector>

namespace straymark::io {
namespace {

// Short and wide: readers that want rows decode little else, and each tile is worth its dictionary.
constexpr int kRowsInTile = 64;

/// A FITS file in memory that cfitsio writes to.
class MemoryFits {
public:
    MemoryFits() {
        constexpr std::size_t kGrowth = 1 << 20;
        check(fits_create_memfile(&file_, &bytes_, &size_, kGrowth, &std::realloc, &status_));
    }
    ~MemoryFits() {
        if (file_ != nullptr) {
            int ignored = 0;
            fits_close_file(file_, &ignored);
        }
        std::free(bytes_);
    }
    MemoryFits(const MemoryFits&) = delete;
    MemoryFits& operator=(const MemoryFits&) = delete;

    [[nodiscard]] fitsfile* get() const { return file_; }
    int* status() { return &status_; }
    [[nodiscard]] std::span<const std::byte> bytes(std::size_t from, std::size_t to) const {
        assert(from <= to && to <= size_);
        return {static_cast<const std::byte*>(bytes_) + from, to - from};
    }
    /// Memory is all that can run out here.
    static void check(int status) {
        if (status != 0) {
            std::array<char, FLEN_STATUS> text{};
            fits_get_errstatus(status, text.data());
            throw std::runtime_error(fmt::format("compressing an image: {}", text.data()));
        }
    }

private:
    fitsfile* file_ = nullptr;
    void* bytes_ = nullptr;
    std::size_t size_ = 0;
    int status_ = 0;
};

std::string text_key(fitsfile* file, const char* keyword) {
    std::array<char, FLEN_VALUE> value{};
    int status = 0;
    fits_read_key(file, TSTRING, keyword, value.data(), nullptr, &status);
    MemoryFits::check(status);
    return value.data();
}

}  // namespace

FitsUnit compressed_float_unit(const std::string& name, std::span<const float> pixels, int width,
                               int height, const std::string& unit) {
    assert(pixels.size() == static_cast<std::size_t>(width) * height);
    MemoryFits memory;
    fitsfile* file = memory.get();
    int* status = memory.status();
    std::array<long, 2> size{width, height};
    std::array<long, 2> tile{width, std::min(kRowsInTile, height)};
    fits_set_compression_type(file, GZIP_2, status);
    fits_set_tile_dim(file, 2, tile.data(), status);
    fits_set_quantize_level(file, 0.0F, status);  // as they are
    fits_create_img(file, FLOAT_IMG, 2, size.data(), status);
    // cfitsio reads through a pointer whose type predates const.
    fits_write_img(file, TFLOAT, 1, static_cast<LONGLONG>(pixels.size()),
                   const_cast<float*>(pixels.data()), status);
    fits_flush_file(file, status);
    LONGLONG header = 0;
    LONGLONG data = 0;
    LONGLONG end = 0;
    fits_get_hduaddrll(file, &header, &data, &end, status);
    MemoryFits::check(*status);
    long row_bytes = 0;
    long rows = 0;
    long heap_bytes = 0;
    fits_read_key(file, TLONG, "NAXIS1", &row_bytes, nullptr, status);
    fits_read_key(file, TLONG, "NAXIS2", &rows, nullptr, status);
    fits_read_key(file, TLONG, "PCOUNT", &heap_bytes, nullptr, status);
    MemoryFits::check(*status);

    HeaderCards cards =
        binary_table_cards(static_cast<std::size_t>(row_bytes), static_cast<std::size_t>(rows),
                           static_cast<std::size_t>(heap_bytes), 1);
    cards.add_text("TTYPE1", "COMPRESSED_DATA");
    cards.add_text("TFORM1", text_key(file, "TFORM1"));
    cards.add_logical("ZIMAGE", true, "an image, compressed in tiles");
    cards.add_text("ZTENSION", "IMAGE");
    cards.add_integer("ZBITPIX", -32);
    cards.add_integer("ZNAXIS", 2);
    cards.add_integer("ZNAXIS1", width);
    cards.add_integer("ZNAXIS2", height);
    cards.add_integer("ZPCOUNT", 0);
    cards.add_integer("ZGCOUNT", 1);
    cards.add_integer("ZTILE1", tile[0]);
    cards.add_integer("ZTILE2", tile[1]);
    cards.add_text("ZCMPTYPE", "GZIP_2", "lossless");
    cards.add_text("ZQUANTIZ", "NONE");
    cards.add_text("EXTNAME", name);
    cards.add_text("BUNIT", unit);
    const std::size_t length = static_cast<std::size_t>(row_bytes) * rows + heap_bytes;
    const auto from = static_cast<std::size_t>(data);
    const std::span<const std::byte> table = memory.bytes(from, from + length);
    return finished_unit(std::move(cards), {table.begin(), table.end()});
}

}  // namespace straymark::io
