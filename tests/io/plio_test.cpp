#include "io/plio.h"

#include <array>
#include <catch2/catch.hpp>
#include <fitsio.h>
#include <memory>
#include <string>

#include "io/mask_fixture.h"
#include "io/mask_image.h"

namespace straymark {
namespace {

/// Line lists as words in the machine's order.
std::vector<unsigned> words_of(const std::vector<std::int16_t>& line) {
    io::PlioEncoder encoder;
    const std::span<const std::byte> bytes = encoder.encode(line);
    std::vector<unsigned> words;
    for (std::size_t i = 0; i + 1 < bytes.size(); i += 2) {
        words.push_back(std::to_integer<unsigned>(bytes[i]) << 8U |
                        std::to_integer<unsigned>(bytes[i + 1]));
    }
    return words;
}

/// The pixels as CFITSIO decodes them from a file that holds one compressed image.
std::vector<std::int16_t> decoded_by_cfitsio(const std::string& path, int width, int height) {
    fitsfile* file = nullptr;
    int status = 0;
    fits_open_diskfile(&file, path.c_str(), READONLY, &status);
    fits_movabs_hdu(file, 2, nullptr, &status);
    int bits_per_pixel = 0;
    fits_get_img_equivtype(file, &bits_per_pixel, &status);
    CHECK(bits_per_pixel == SHORT_IMG);
    std::array<long, 2> size{};
    fits_get_img_size(file, 2, size.data(), &status);
    CHECK(size[0] == width);
    CHECK(size[1] == height);
    std::vector<std::int16_t> pixels(static_cast<std::size_t>(width) *
                                     static_cast<std::size_t>(height));
    fits_read_img(file, TSHORT, 1, static_cast<LONGLONG>(pixels.size()), nullptr, pixels.data(),
                  nullptr, &status);
    int data_status = 0;
    int header_status = 0;
    fits_verify_chksum(file, &data_status, &header_status, &status);
    CHECK(data_status == 1);
    CHECK(header_status == 1);
    fits_close_file(file, &status);
    CHECK(status == 0);
    return pixels;
}

}  // namespace

TEST_CASE("Line lists are those of the FITS standard, word for word") {
    // FITS 4.0, section 10.4.3 and its table of instructions, applied by hand. Header: 0, 7, -100
    // (as 16 bits), length low, length high, 0, 0. Current value at first: 1.
    const unsigned version = 0x10000 - 100;
    SECTION("zeros alone") {
        CHECK(words_of(std::vector<std::int16_t>(5, 0)) ==
              std::vector<unsigned>{0, 7, version, 8, 0, 0, 0, 0x0005});
    }
    SECTION("zeros, then one pixel of the current value") {
        CHECK(words_of({0, 0, 1}) == std::vector<unsigned>{0, 7, version, 8, 0, 0, 0, 0x5003});
    }
    SECTION("a raised value for one pixel, then a lowered one for three") {
        CHECK(words_of({4, 2, 2, 2}) ==
              std::vector<unsigned>{0, 7, version, 10, 0, 0, 0, 0x6003, 0x3002, 0x4003});
    }
    SECTION("a step beyond twelve bits sets the value in two words") {
        CHECK(words_of({0x7ABC, 0x7ABC}) ==
              std::vector<unsigned>{0, 7, version, 10, 0, 0, 0, 0x1ABC, 0x0007, 0x4002});
    }
    SECTION("more zeros than twelve bits count") {
        CHECK(words_of(std::vector<std::int16_t>(5000, 0)) ==
              std::vector<unsigned>{0, 7, version, 9, 0, 0, 0, 0x0FFF, 5000 - 4095});
    }
}

TEST_CASE("A line list is never longer than promised and states its length") {
    std::mt19937 random(5);
    std::vector<std::int16_t> line(20000);
    for (int texture = 0; texture < test::kTextures; ++texture) {
        test::fill_line(line, texture, random);
        const std::vector<unsigned> words = words_of(line);
        CHECK(words.size() <= 7 + 3 * line.size());
        CHECK(words[3] + (words[4] << 15U) == words.size());
        for (const unsigned index : {1U, 3U, 4U}) {
            CHECK(words[index] < 0x8000);
        }
    }
    // The worst case: every pixel a step beyond twelve bits. Two words to set, one to emit.
    for (std::size_t i = 0; i < line.size(); ++i) {
        line[i] = i % 2 == 0 ? io::kLargestPlioValue : std::int16_t{5};
    }
    CHECK(words_of(line).size() == 7 + 3 * line.size());
}

TEST_CASE("CFITSIO decodes thousands of random lines to the same pixels") {
    const test::ScratchFolder folder;
    // 12,000 lines in all, of widths about the strides and instruction limits of the encoder.
    const std::array<std::pair<int, int>, 8> sizes = {{{1, 600},
                                                       {31, 2400},
                                                       {32, 2400},
                                                       {33, 2400},
                                                       {100, 3000},
                                                       {4095, 600},
                                                       {4097, 300},
                                                       {12500, 300}}};
    unsigned seed = 1;
    for (const auto& [width, height] : sizes) {
        const DetectorMask mask = test::textured_mask(width, height, seed++);
        const std::string path = folder.file("image.fits");
        const std::array units = {io::mask_image_unit("d1", mask, {})};
        io::write_fits(path, {}, units);
        CHECK(decoded_by_cfitsio(path, width, height) == mask.bits);
    }
}

}  // namespace straymark
