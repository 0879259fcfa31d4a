#include "io/fits_isolated.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <cstdlib>
#include <filesystem>
#include <fitsio.h>
#include <fstream>
#include <iterator>
#include <string_view>
#include <zlib.h>

#include "core/error.h"
#include "io/gzip.h"
#include "io/raw_reader.h"
#include "io/raw_support.h"

using namespace straymark;
using namespace straymark::io;
using namespace straymark::test;

namespace {

// This test program is its own decoder: the child that it starts ends here, before any test.
__attribute__((constructor)) void decode_if_asked(int argc, char** argv) {
    if (argc > 1 && std::string_view(argv[1]) == kDecodeArgument) {
        std::_Exit(isolated_decode_main(argc, argv));
    }
}

const std::string kHostile = std::string(STRAYMARK_TEST_DATA) + "/fault/hostile/";

/// An image as cfitsio compresses it; with DATASUM.
template <typename T>
void write_compressed(const std::string& path, int compression, int type, int width, int height,
                      std::vector<T> values, const char* zero = nullptr) {
    int status = 0;
    fitsfile* fits = nullptr;
    long axes[2] = {width, height};
    fits_create_diskfile(&fits, path.c_str(), &status);
    fits_create_img(fits, 8, 0, nullptr, &status);
    fits_set_compression_type(fits, compression, &status);
    fits_create_img(fits, bitpix_of<T>(), 2, axes, &status);
    char name[] = "D1";
    fits_write_key(fits, TSTRING, "EXTNAME", name, nullptr, &status);
    if (zero != nullptr) {
        fits_write_key_longwarn(fits, &status);
        double offset = std::atof(zero);
        fits_write_key(fits, TDOUBLE, "BZERO", &offset, nullptr, &status);
        fits_set_bscale(fits, 1.0, 0.0, &status);
    }
    fits_write_img(fits, type, 1, static_cast<LONGLONG>(values.size()), values.data(), &status);
    fits_write_chksum(fits, &status);
    fits_close_file(fits, &status);
    REQUIRE(status == 0);
}

std::vector<std::int16_t> ramp(int width, int height) {
    std::vector<std::int16_t> values;
    for (int i = 0; i < width * height; ++i) {
        values.push_back(static_cast<std::int16_t>(i * 7 % 30011 - 15000));
    }
    return values;
}

std::string bytes_of(const std::string& path) {
    std::ifstream in(path, std::ios::binary);
    return {std::istreambuf_iterator<char>(in), {}};
}

void write_gzip(const std::string& path, const std::string& bytes) {
    gzFile out = gzopen(path.c_str(), "wb");
    gzwrite(out, bytes.data(), static_cast<unsigned>(bytes.size()));
    gzclose(out);
}

/// A camera of one 64 x 64 detector in one image, the first compressed one of a file.
Camera plain_camera(const std::string& hdu, int size = 64) {
    Camera camera = small_camera();
    camera.raw.hdu = hdu;
    camera.raw.data.reset();
    camera.raw.order = PixelOrder::detector;
    Detector& detector = camera.detectors[0];
    detector.width = detector.height = size;
    detector.amplifiers = {half_detector("a01", "", {0, 0, size, size}, Corner::lower_left, 0)};
    return camera;
}

/// Reads all of a compressed image of a file, or says why not.
std::string outcome(const std::string& path) {
    try {
        const InputFile file(path);
        for (const FitsHdu& hdu : scan_fits(file).hdus) {
            if (hdu.kind == HduKind::compressed_image) {
                const int width = static_cast<int>(hdu.axes.at(0));
                const int height = static_cast<int>(hdu.axes.at(1));
                std::vector<float> pixels(static_cast<std::size_t>(width * height));
                decode_isolated(file, hdu, kThisProgram).read({0, 0, width, height}, pixels);
                return "read";
            }
        }
    } catch (const InputError& error) {
        return error.what();
    }
    return "nothing to decode";
}

bool mentions(const std::string& text, const std::string& part) {
    return text.find(part) != std::string::npos;
}

}  // namespace

TEST_CASE("A tile-compressed image comes back pixel by pixel") {
    constexpr int kWidth = 70;
    constexpr int kHeight = 50;
    const std::vector<std::int16_t> values = ramp(kWidth, kHeight);
    const int compression = GENERATE(RICE_1, GZIP_1, GZIP_2, HCOMPRESS_1);
    const TemporaryFolder folder;
    const std::string path = folder.file("x.fits.fz");
    write_compressed(path, compression, TSHORT, kWidth, kHeight, values);
    const InputFile file(path);
    const FitsStructure structure = scan_fits(file);
    const FitsHdu& hdu = structure.hdus.at(1);
    REQUIRE(hdu.kind == HduKind::compressed_image);
    CHECK(hdu.name == "D1");
    CHECK(hdu.data_sum);
    const DecodedImage image = decode_isolated(file, hdu, kThisProgram);
    const PixelBox box{3, 4, 60, 49};
    std::vector<float> pixels(static_cast<std::size_t>(box.width() * box.height()));
    image.read(box, pixels);
    bool equal = true;
    for (int y = box.y0; y < box.y1; ++y) {
        for (int x = box.x0; x < box.x1; ++x) {
            const auto at = static_cast<std::size_t>((y - box.y0) * box.width() + x - box.x0);
            equal = equal && pixels[at] == values[static_cast<std::size_t>(y * kWidth + x)];
        }
    }
    CHECK(equal);
}

TEST_CASE("A compressed unsigned image has its zero applied once") {
    const TemporaryFolder folder;
    const std::string path = folder.file("x.fits.fz");
    write_compressed(path, RICE_1, TSHORT, 4, 1, std::vector<std::int16_t>{-32768, -1, 0, 32767},
                     "32768");
    const InputFile file(path);
    std::vector<float> pixels(4);
    decode_isolated(file, scan_fits(file).hdus.at(1), kThisProgram).read({0, 0, 4, 1}, pixels);
    CHECK(pixels == std::vector<float>{0.0F, 32767.0F, 32768.0F, 65535.0F});
}

TEST_CASE("A compressed image that was changed is refused by its sum, before it is decoded") {
    const TemporaryFolder folder;
    const std::string path = folder.file("x.fits.fz");
    write_compressed(path, RICE_1, TSHORT, 64, 64, ramp(64, 64));
    CHECK(outcome(path) == "read");
    std::string bytes = bytes_of(path);
    const InputFile file(path);
    const FitsHdu hdu = scan_fits(file).hdus.at(1);
    bytes[static_cast<std::size_t>(hdu.data_offset + hdu.data_bytes - 20)] ^= 0x10;
    const std::string changed = folder.write("y.fits.fz", bytes);
    CHECK(mentions(outcome(changed), "DATASUM"));
    // Nothing was started for it.
    CHECK_THROWS_WITH(decode_isolated(InputFile(changed), hdu, "/no/such/program"),
                      Catch::Contains("DATASUM"));
}

TEST_CASE("Damaged compressed files are refused and kill nobody") {
    for (const char* name : {"rice_int_segv.fits", "rice_float_segv.fits", "hcompress_segv.fits",
                             "header_sigfpe.fits"}) {
        INFO(name);
        const std::string result = outcome(kHostile + name);
        INFO(result);
        CHECK(mentions(result, "this file is corrupt"));
        CHECK(mentions(result, name));
        CHECK(mentions(result, "HDU 1"));
    }
}

TEST_CASE("A compression that is for masks is refused by name") {
    const std::string result = outcome(kHostile + "plio_segv.fits");
    CHECK(mentions(result, "HDU 1, keyword ZCMPTYPE: found 'PLIO_1'"));
}

TEST_CASE("Any changed byte of a compressed image gives an error or pixels, never an end") {
    // Sums are taken out, so that the decoder is what meets the damage.
    const TemporaryFolder folder;
    const std::string path = folder.file("x.fits.fz");
    write_compressed(path, RICE_1, TSHORT, 64, 64, ramp(64, 64));
    std::string bytes = bytes_of(path);
    for (std::size_t at = bytes.find("DATASUM ="); at != std::string::npos;
         at = bytes.find("DATASUM =")) {
        bytes.replace(at, 9, "XATASUM =");
    }
    const FitsHdu hdu = scan_fits(InputFile(path)).hdus.at(1);
    int refused = 0;
    constexpr int kMutants = 60;
    for (int i = 0; i < kMutants; ++i) {
        std::string mutant = bytes;
        const auto at = static_cast<std::size_t>(hdu.data_offset + i * hdu.data_bytes / kMutants);
        mutant[at] = static_cast<char>(mutant[at] ^ (1 + 37 * i % 255));
        refused += outcome(folder.write("mutant.fits", mutant)) == "read" ? 0 : 1;
    }
    CHECK(refused > 0);
}

TEST_CASE("A decoder that is not there, or is another program, is said so") {
    const TemporaryFolder folder;
    const std::string path = folder.file("x.fits.fz");
    write_compressed(path, RICE_1, TSHORT, 64, 64, ramp(64, 64));
    const InputFile file(path);
    const FitsHdu hdu = scan_fits(file).hdus.at(1);
    CHECK_THROWS_AS(decode_isolated(file, hdu, "/no/such/program"), SystemError);
    CHECK_THROWS_AS(decode_isolated(file, hdu, "/bin/true"), InputError);
    CHECK_THROWS_AS(decode_isolated(file, hdu, "/bin/false"), InputError);
}

TEST_CASE("A decoding request that makes no sense is refused by the child") {
    const std::string self = std::filesystem::read_symlink(kThisProgram).string();
    for (const char* request : {"0 -1 64 64 5", "0 100 0 64 5", "0 100 a 64 5", "0 100 64 64", "",
                                "0 100 9223372036854775807 64 5"}) {
        const std::string command =
            fmt::format("'{}' {} {} 2>/dev/null </dev/null", self, kDecodeArgument, request);
        INFO(command);
        CHECK(std::system(command.c_str()) != 0);
    }
}

TEST_CASE("A compressed raw file is read like a plain one") {
    const TemporaryFolder folder;
    const std::string path = folder.file("raw.fits.fz");
    const std::vector<std::int16_t> values = ramp(64, 64);
    write_compressed(path, RICE_1, TSHORT, 64, 64, values);
    const Camera camera = plain_camera("{detector}");
    // The exposure's cards go into the primary header, which is not compressed.
    std::string bytes = bytes_of(path);
    bytes = FitsBuilder(exposure_cards()).bytes() + bytes.substr(2880);
    const auto reader = make_raw_reader(camera);
    const RawFile file = reader->inspect(folder.write("raw.fits.fz", bytes));
    CHECK(file.detectors == std::vector<int>{0});
    AmplifierFrame frame;
    reader->open(file, 0)->read(0, frame);
    CHECK(std::equal(frame.pixels.begin(), frame.pixels.end(), values.begin(), values.end()));
}

TEST_CASE("A gzip file is expanded whatever its name, and read like a plain one") {
    const TemporaryFolder folder;
    std::vector<std::string> cards = exposure_cards();
    const std::string plain =
        FitsBuilder::primary_image<std::int16_t>(64, 64, ramp(64, 64), cards).bytes();
    const std::string path = folder.file("raw.fits");
    write_gzip(path, plain);
    const Camera camera = plain_camera("primary");
    const auto reader = make_raw_reader(camera);
    const RawFile file = reader->inspect(path);
    CHECK(file.digest == file_digest(InputFile(path)));
    AmplifierFrame frame;
    reader->open(file, 0)->read(0, frame);
    const std::vector<std::int16_t> values = ramp(64, 64);
    CHECK(std::equal(frame.pixels.begin(), frame.pixels.end(), values.begin(), values.end()));
}

TEST_CASE("A gzip file of several members is read to its end") {
    const TemporaryFolder folder;
    write_gzip(folder.file("a"), "first ");
    write_gzip(folder.file("b"), "second");
    const InputFile both(folder.write(
        "c", bytes_of(folder.file("a")) + bytes_of(folder.file("b")) + std::string(100, '\0')));
    const InputFile plain = expanded(both, 1000);
    REQUIRE(plain.size() == 12);
    std::string text(12, ' ');
    plain.read_at(0, std::as_writable_bytes(std::span(text)));
    CHECK(text == "first second");
}

TEST_CASE("A gzip file that is cut off, changed or too large is refused") {
    const TemporaryFolder folder;
    const std::string plain(100'000, 'x');
    write_gzip(folder.file("a"), plain);
    const std::string packed = bytes_of(folder.file("a"));
    const auto fault = [&](const std::string& bytes, std::int64_t limit) -> std::string {
        const InputFile file(folder.write("b", bytes));
        CHECK(is_gzip(file));
        try {
            static_cast<void>(expanded(file, limit));
        } catch (const InputError& error) {
            return error.what();
        }
        return "no error";
    };
    CHECK(fault(packed, 100'000) == "no error");
    CHECK(mentions(fault(packed, 99'999), "more than 99999 bytes"));
    CHECK(mentions(fault(packed.substr(0, packed.size() - 9), 1'000'000), "end of the file"));
    std::string changed = packed;
    changed[changed.size() - 6] ^= 1;  // within the checksum that ends the member (RFC 1952)
    CHECK(mentions(fault(changed, 1'000'000), "corrupt"));
}

TEST_CASE("A gzip bomb is refused after what an exposure of the camera could hold") {
    const Camera camera = plain_camera("primary", 512);
    CHECK_THROWS_WITH(make_raw_reader(camera)->inspect(kHostile + "bomb.fits.gz"),
                      Catch::Contains("no more than an exposure of this camera can hold"));
}

TEST_CASE(
    "A header that is no FITS file, or has an open string, goes through the reader unharmed") {
    const Camera camera = plain_camera("primary");
    CHECK_THROWS_AS(make_raw_reader(camera)->inspect(kHostile + "wcspih_unclosed_quote.hdr"),
                    InputError);
}
