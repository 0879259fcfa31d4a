#include "io/fits_scan.h"

#include <catch2/catch.hpp>
#include <filesystem>
#include <sys/stat.h>

#include "core/error.h"
#include "io/fits_pixels.h"
#include "support/fits_builder.h"

using namespace straymark;
using namespace straymark::io;
using namespace straymark::test;

namespace {

std::string fault_of(const TemporaryFolder& folder, const std::string& bytes) {
    try {
        scan_fits(InputFile(folder.write("raw.fits", bytes)));
    } catch (const InputError& error) {
        return error.what();
    }
    return "no error";
}

std::string with_primary(const std::vector<std::string>& cards) {
    return header_bytes(cards);
}

/// One HDU's pixels through the reader.
template <typename T>
std::vector<float> values_of(const std::vector<T>& stored, const std::vector<std::string>& cards) {
    const TemporaryFolder folder;
    const int width = static_cast<int>(stored.size());
    const InputFile file(
        folder.write("image.fits", FitsBuilder::primary_image<T>(width, 1, stored, cards).bytes()));
    const FitsStructure structure = scan_fits(file);
    std::vector<float> values(stored.size());
    read_pixels(file, structure.hdus[0], {0, 0, width, 1}, values);
    return values;
}

}  // namespace

TEST_CASE("A scan finds every HDU with its name, size and place") {
    const TemporaryFolder folder;
    const std::vector<std::int16_t> pixels(20 * 10, 7);
    FitsBuilder builder({text_card("OBS_ID", "n1")});
    builder.image("d1_a01", 20, 10, pixels).image("d1_a02", 20, 10, pixels);
    const InputFile file(folder.write("a.fits", builder.bytes()));
    const FitsStructure structure = scan_fits(file);
    REQUIRE(structure.hdus.size() == 3);
    CHECK(structure.notes.empty());
    const FitsHdu& second = structure.hdus[2];
    CHECK(second.name == "d1_a02");
    CHECK(second.kind == HduKind::image);
    CHECK(second.axes == std::vector<std::int64_t>{20, 10});
    CHECK(second.data_bytes == 400);
    // Primary header, then a header block and a data block for each image, 2880 bytes each.
    CHECK(second.header_offset == 3 * 2880);
    CHECK(second.data_offset == 4 * 2880);
    CHECK(structure.images_by_name.find("D1_A02")->second == 2);
    CHECK(read_header(file, second).find("EXTNAME")->text == "d1_a02");
}

TEST_CASE("A file cut off anywhere is reported as truncated, with the HDU") {
    const TemporaryFolder folder;
    FitsBuilder builder;
    builder.image("d1_a01", 200, 100, std::vector<std::int16_t>(20000, 7));
    const std::string whole = builder.bytes();
    // Primary header 2880 bytes, extension header 2880, data 40000.
    for (const std::size_t size :
         {std::size_t{2890}, std::size_t{2880 + 8}, std::size_t{4000}, std::size_t{5760},
          std::size_t{30000}, std::size_t{5760 + 39999}}) {
        INFO(size);
        const std::string fault = fault_of(folder, whole.substr(0, size));
        CHECK(fault.find("HDU 1") != std::string::npos);
        CHECK(fault.find("truncated") != std::string::npos);
    }
    const std::string fault = fault_of(folder, whole.substr(0, 5760 + 1234));
    CHECK(fault.find("1234 bytes of data") != std::string::npos);
    CHECK(fault.find("40000") != std::string::npos);
}

TEST_CASE("Missing padding at the very end is noted, not refused") {
    const TemporaryFolder folder;
    FitsBuilder builder;
    builder.image("d1_a01", 200, 100, std::vector<std::int16_t>(20000, 7));
    const InputFile file(folder.write("a.fits", builder.bytes().substr(0, 5760 + 40000)));
    const FitsStructure structure = scan_fits(file);
    CHECK(structure.hdus.size() == 2);
    CHECK(structure.notes.size() == 1);
}

TEST_CASE("Bytes behind the last HDU that are no HDU are noted") {
    const TemporaryFolder folder;
    const InputFile file(folder.write("a.fits", FitsBuilder().bytes() + "trailing rubbish"));
    const FitsStructure structure = scan_fits(file);
    CHECK(structure.hdus.size() == 1);
    REQUIRE(structure.notes.size() == 1);
    CHECK(structure.notes[0].find("16 bytes") != std::string::npos);
}

TEST_CASE("A file that is not FITS is refused by what it begins with") {
    const TemporaryFolder folder;
    CHECK(fault_of(folder, "").find("0 bytes") != std::string::npos);
    CHECK(fault_of(folder, "SIMPLE  =").find("FITS") != std::string::npos);
    CHECK(fault_of(folder, std::string(5000, 'x')).find("'xxxxxxxxx'") != std::string::npos);
}

TEST_CASE("Names that libraries would obey are plain names here") {
    CHECK_THROWS_AS(InputFile("no-such-file.fits"), InputError);
    CHECK_THROWS_AS(InputFile("-"), InputError);
    const TemporaryFolder folder;
    CHECK_THROWS_AS(InputFile(folder.file("")), InputError);
    const std::string pipe = folder.file("fifo.fits");
    REQUIRE(::mkfifo(pipe.c_str(), 0600) == 0);
    CHECK_THROWS_AS(InputFile(pipe), InputError);
    const std::string odd = folder.write("a [1:2,3:4] | -x.fits", FitsBuilder().bytes());
    CHECK(scan_fits(InputFile(odd)).hdus.size() == 1);
}

TEST_CASE("Sizes that no file can have are refused before anything is allocated") {
    const TemporaryFolder folder;
    const std::string huge = "2147483647";
    const std::string overflow = fault_of(
        folder, with_primary({card("SIMPLE", "T"), card("BITPIX", "-64"), card("NAXIS", "3"),
                              card("NAXIS1", huge), card("NAXIS2", huge), card("NAXIS3", huge)}));
    CHECK(overflow.find("overflow") != std::string::npos);
    const std::string large =
        fault_of(folder, with_primary({card("SIMPLE", "T"), card("BITPIX", "8"), card("NAXIS", "2"),
                                       card("NAXIS1", huge), card("NAXIS2", huge)}));
    CHECK(large.find("0 bytes of data") != std::string::npos);
    CHECK(large.find("4611686014132420609") != std::string::npos);
}

TEST_CASE("Structural keywords outside their range are refused by name") {
    const TemporaryFolder folder;
    const auto fault = [&](const std::string& bitpix, const std::string& naxis,
                           const std::string& axis) {
        return fault_of(folder, with_primary({card("SIMPLE", "T"), card("BITPIX", bitpix),
                                              card("NAXIS", naxis), card("NAXIS1", axis)}));
    };
    CHECK(fault("12", "0", "1").find("BITPIX") != std::string::npos);
    CHECK(fault("x", "0", "1").find("BITPIX") != std::string::npos);
    CHECK(fault("8", "-1", "1").find("NAXIS") != std::string::npos);
    CHECK(fault("8", "1000", "1").find("NAXIS") != std::string::npos);
    CHECK(fault("8", "1", "-5").find("NAXIS1") != std::string::npos);
    CHECK(fault("8", "2", "1").find("NAXIS2") != std::string::npos);
    CHECK(fault("8", "0", "1") == "no error");
    const std::string negative_groups = fault_of(
        folder,
        FitsBuilder().bytes() +
            header_bytes({text_card("XTENSION", "IMAGE"), card("BITPIX", "8"), card("NAXIS", "1"),
                          card("NAXIS1", "10"), card("PCOUNT", "-20"), card("GCOUNT", "1")}));
    CHECK(negative_groups.find("PCOUNT") != std::string::npos);
}

TEST_CASE("A header without end is refused, however long the file") {
    const TemporaryFolder folder;
    std::string bytes = card("SIMPLE", "T");
    for (int i = 0; i < 100'200; ++i) {
        bytes += fmt::format("{:<80}", "COMMENT");
    }
    CHECK(fault_of(folder, padded(bytes, ' ')).find("more than 100000 cards") != std::string::npos);
}

TEST_CASE("Endless HDUs are refused") {
    const TemporaryFolder folder;
    const std::string empty =
        header_bytes({text_card("XTENSION", "IMAGE"), card("BITPIX", "8"), card("NAXIS", "0")});
    std::string bytes = FitsBuilder().bytes();
    for (int i = 0; i < 20'001; ++i) {
        bytes += empty;
    }
    CHECK(fault_of(folder, bytes).find("more than 20000 HDUs") != std::string::npos);
}

// Physical values: FITS 4.0, equation 3: value = BZERO + BSCALE * stored; BLANK in section 5.3.

TEST_CASE("Unsigned 16-bit pixels come back exactly") {
    const std::vector<std::int16_t> stored{-32768, -1, 0, 1, 32767};
    const std::vector<float> expected{0.0F, 32767.0F, 32768.0F, 32769.0F, 65535.0F};
    CHECK(values_of(stored, {card("BZERO", "32768"), card("BSCALE", "1")}) == expected);
}

TEST_CASE("Every pixel type is read with its byte order and sign") {
    CHECK(values_of<std::uint8_t>({0, 127, 200, 255}, {}) ==
          std::vector<float>{0.0F, 127.0F, 200.0F, 255.0F});
    CHECK(values_of<std::int16_t>({-2, 258, -32768}, {}) ==
          std::vector<float>{-2.0F, 258.0F, -32768.0F});
    CHECK(values_of<std::int32_t>({-2, 16909060, 1}, {}) ==
          std::vector<float>{-2.0F, 16909060.0F, 1.0F});
    CHECK(values_of<std::int64_t>({-2, 4294967296, 1}, {}) ==
          std::vector<float>{-2.0F, 4294967296.0F, 1.0F});
    CHECK(values_of<float>({-2.5F, 1e-30F, 3.25F}, {}) == std::vector<float>{-2.5F, 1e-30F, 3.25F});
    CHECK(values_of<double>({-2.5, 1e30, 3.25}, {}) == std::vector<float>{-2.5F, 1e30F, 3.25F});
}

TEST_CASE("A scale and a zero that is no whole number are honoured") {
    CHECK(values_of<std::int16_t>({-2, 4}, {card("BZERO", "0.5"), card("BSCALE", "0.25")}) ==
          std::vector<float>{0.0F, 1.5F});
    CHECK(values_of<std::int16_t>({-2, 4}, {card("BZERO", "0.5")}) ==
          std::vector<float>{-1.5F, 4.5F});
    CHECK(values_of<float>({-2.0F, 4.0F}, {card("BZERO", "10"), card("BSCALE", "2")}) ==
          std::vector<float>{6.0F, 18.0F});
}

TEST_CASE("Large unsigned 32-bit pixels lose no more than float must") {
    // 3,000,000,000 is a multiple of 256, the spacing of float there; BZERO alone is not the trap,
    // adding it in float is: 2147483648 + 852516352.
    CHECK(values_of<std::int32_t>({852516352}, {card("BZERO", "2147483648")}) ==
          std::vector<float>{3000000000.0F});
    // 2^31 - 2^31 + 5: the difference must be taken before rounding.
    CHECK(values_of<std::int32_t>({-2147483643}, {card("BZERO", "2147483648")}) ==
          std::vector<float>{5.0F});
}

TEST_CASE("Blank pixels have no value, before scaling") {
    const std::vector<float> values =
        values_of<std::int16_t>({-32768, 5, 0}, {card("BLANK", "-32768"), card("BZERO", "32768")});
    CHECK(std::isnan(values[0]));
    CHECK(values[1] == 32773.0F);
    CHECK(values[2] == 32768.0F);
    const std::vector<float> floats =
        values_of<float>({std::numeric_limits<float>::quiet_NaN(), 1.0F}, {card("BLANK", "1")});
    CHECK(std::isnan(floats[0]));
    CHECK(floats[1] == 1.0F);
}

TEST_CASE("A box of an image is read row by row, also where it crosses the reading blocks") {
    const TemporaryFolder folder;
    // 300 x 400 16-bit pixels are 240,000 bytes: several reading blocks.
    constexpr int kWidth = 300;
    constexpr int kHeight = 400;
    std::vector<std::int32_t> pixels(kWidth * kHeight);
    for (int i = 0; i < kWidth * kHeight; ++i) {
        pixels[static_cast<std::size_t>(i)] = i;
    }
    FitsBuilder builder;
    builder.image("x", kWidth, kHeight, pixels);
    const InputFile file(folder.write("a.fits", builder.bytes()));
    const FitsStructure structure = scan_fits(file);
    for (const PixelBox box : {PixelBox{0, 0, kWidth, kHeight}, PixelBox{0, 3, kWidth, 399},
                               PixelBox{17, 5, 140, 400}, PixelBox{299, 399, 300, 400}}) {
        std::vector<float> values(static_cast<std::size_t>(box.width() * box.height()));
        read_pixels(file, structure.hdus[1], box, values);
        bool equal = true;
        for (int y = 0; y < box.height(); ++y) {
            for (int x = 0; x < box.width(); ++x) {
                equal = equal && values[static_cast<std::size_t>(y * box.width() + x)] ==
                                     static_cast<float>((y + box.y0) * kWidth + x + box.x0);
            }
        }
        CHECK(equal);
    }
}

TEST_CASE("The checksum of a data unit is that of the standard") {
    const TemporaryFolder folder;
    // FITS 4.0, appendix J: ones'-complement sum of big-endian 32-bit words; by hand:
    // 0xFFFFFFFF + 0x00000002 = 0x1_00000001, end-around carry 0x00000002.
    FitsBuilder builder;
    builder.image("x", 2, 1, std::vector<std::int32_t>{-1, 2});
    const InputFile file(folder.write("a.fits", builder.bytes()));
    CHECK(data_checksum(file, scan_fits(file).hdus[1]) == 2U);
}
