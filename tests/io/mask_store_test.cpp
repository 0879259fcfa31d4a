#include "io/mask_store.h"

#include <catch2/catch.hpp>
#include <cerrno>
#include <cmath>
#include <fitsio.h>
#include <fstream>
#include <limits>
#include <sstream>
#include <thread>

#include "core/error.h"
#include "io/files.h"
#include "io/mask_fixture.h"
#include "io/outside.h"

namespace straymark {
namespace {

const std::string kLongDigest = "xxh128:" + std::string(500, 'a') + "&'" + std::string(67, 'b');

MaskFileTables awkward_tables() {
    MaskFileTables tables;
    tables.primary = {{"OBS_ID", "petrel-0001", "exposure"},
                      {"RAWFILE",
                       "n\xC3\xA4"
                       "chtlich's 100% [1].fits",
                       "raw file"},
                      {"VERSION", "0.1.0", ""},
                      {"EMPTY", "", "a value without characters"},
                      {"DIGEST1", kLongDigest, "of an input"},
                      {"WIDE", std::string(60, 'w'), "a comment that needs a card of its own"}};
    tables.summary = {"xxh128:0123456789abcdef0123456789abcdef", 0.0125, 0.5, 1.0 / 3.0};
    tables.settings.threshold = {1.0, 0.5, 2.0, 1.25};
    tables.settings.background_px = 64;
    tables.settings.template_noise = 0.25;
    MarkRow mark;
    mark.kind = "crosstalk";
    mark.detector = "d1";
    mark.cause = "echo of d1/a03 at (101, 877)";
    mark.status = "measured";
    mark.source_x = std::numeric_limits<double>::quiet_NaN();
    mark.x = 101.25;
    mark.x1 = -1;
    mark.x2 = 2048;
    mark.strength_e = -1.0 / 3.0;
    mark.area_px = std::int64_t{1} << 40;
    tables.marks = {mark, mark};
    tables.marks[1].cause = std::string(300, 'c') + "\n\x7F";
    DetectionRow amplifier;
    amplifier.detector = "d1";
    amplifier.amplifier = "a01";
    amplifier.state = "ok";
    amplifier.noise_e = 5.0;
    amplifier.psf_stars = 31;
    tables.detection = {amplifier};
    tables.psfs = {{"d1", "measured", 31, 2.8, 30.5, 1, {0, .1F, 0, .1F, .6F, .1F, 0, .1F, 0}},
                   {"d2", "none", 0, 0.0, 0.0, 0, {}}};
    tables.assessed = {{"d1", "ghost", "off", "not built yet", "", 0.0, 0.0, 0.0}};
    return tables;
}

std::vector<std::string> wcs_cards() {
    return {"CTYPE1  = 'RA---TAN'",
            "CTYPE2  = 'DEC--TAN'",
            "CRVAL1  =                150.0",
            "CRVAL2  =                  2.0",
            "CRPIX1  =                100.5",
            "CRPIX2  =                 60.5",
            "CD1_1   = -1.0E-04",
            "CD1_2   =  0.0",
            "CD2_1   =  0.0",
            "CD2_2   =  1.0E-04",
            "NAXIS1  =                  777",   // structural: must not get in
            "CRVAL1  =                  1.0"};  // the second of its name: must not get in
}

std::string bytes_of_file(const std::string& path) {
    std::ifstream file(path, std::ios::binary);
    std::ostringstream bytes;
    bytes << file.rdbuf();
    return bytes.str();
}

void change_file(const std::string& path, std::size_t at, char to) {
    std::fstream file(path, std::ios::binary | std::ios::in | std::ios::out);
    file.seekp(static_cast<std::streamoff>(at));
    file.put(to);
}

/// The same pixels uncompressed, by CFITSIO: what astropy's decoding is compared with.
void write_uncompressed(const std::string& path, const std::vector<const DetectorMask*>& masks) {
    fitsfile* file = nullptr;
    int status = 0;
    fits_create_diskfile(&file, path.c_str(), &status);
    for (const DetectorMask* mask : masks) {
        std::array<long, 2> size = {mask->width, mask->height};
        fits_create_img(file, SHORT_IMG, 2, size.data(), &status);
        std::vector<std::int16_t> pixels = mask->bits;
        fits_write_img(file, TSHORT, 1, static_cast<LONGLONG>(pixels.size()), pixels.data(),
                       &status);
    }
    fits_close_file(file, &status);
    REQUIRE(status == 0);
}

std::string write_mask(io::MaskFolder& store, const std::string& raw, const DetectorMask& first,
                       const DetectorMask& second) {
    const auto writer = store.begin(raw);
    writer->add(0, "d1", first, wcs_cards());
    writer->add(1, "d2", second, {});
    writer->finish(awkward_tables());
    return store.path_of(raw);
}

}  // namespace

TEST_CASE("A mask file passes the standard verifier and astropy reads all of it as written") {
    const test::ScratchFolder folder;
    io::MaskFolder store(folder.file("masks"));
    const DetectorMask first = test::textured_mask(200, 120, 7);
    const DetectorMask second = test::textured_mask(4100, 60, 8);
    const std::string path = write_mask(store, "raw/n0001.fits", first, second);

    const test::CommandResult verdict = test::verify(path);
    INFO(verdict.output);
    CHECK(verdict.output.find(test::kNoFault) != std::string::npos);

    write_uncompressed(folder.file("plain.fits"), {&first, &second});
    const test::CommandResult read = test::run_script(
        "astropy_mask_test.py", test::quoted(path) + " " + test::quoted(folder.file("plain.fits")));
    INFO(read.output);
    CHECK(read.status == 0);
}

TEST_CASE("A mask without marks or live amplifiers is still a file without fault") {
    const test::ScratchFolder folder;
    io::MaskFolder store(folder.path());
    const auto writer = store.begin("empty.fits");
    writer->finish({});
    const test::CommandResult verdict = test::verify(store.path_of("empty.fits"));
    INFO(verdict.output);
    CHECK(verdict.output.find(test::kNoFault) != std::string::npos);
}

TEST_CASE("Masks carry the raw file's name with another extension") {
    const io::MaskFolder store("masks");
    for (const char* raw :
         {"/a/b/n1.fits", "n1.fit", "n1.fts", "n1.fits.fz", "n1.fits.gz", "n1.FITS", "n1"}) {
        CHECK(store.path_of(raw) == "masks/n1.mask.fits");
    }
    CHECK(store.path_of("-n 1[2]|x.fits") == "masks/-n 1[2]|x.mask.fits");
    CHECK(store.path_of("n1.v2.dat") == "masks/n1.v2.dat.mask.fits");
    CHECK(store.path_of("/a/.fits") == "masks/.fits.mask.fits");
}

TEST_CASE("The summary comes back from a complete mask and from nothing else") {
    const test::ScratchFolder folder;
    io::MaskFolder store(folder.path());
    const DetectorMask mask = test::textured_mask(64, 20, 9);
    CHECK_FALSE(store.existing("n.fits").has_value());
    const std::string path = write_mask(store, "n.fits", mask, mask);
    REQUIRE(store.existing("n.fits").has_value());
    CHECK(store.existing("n.fits")->build_key == "xxh128:0123456789abcdef0123456789abcdef");
    CHECK(store.existing("n.fits")->flagged_fraction == 0.0125);
    CHECK(store.existing("n.fits")->marginal_fraction == 0.5);
    CHECK(store.existing("n.fits")->unassessed_fraction == 1.0 / 3.0);
    const std::string whole = bytes_of_file(path);

    SECTION("any character of the primary header changed") {
        for (const std::size_t at : {std::size_t{3}, std::size_t{420}, whole.find("BUILDKEY") + 20,
                                     whole.find("CHECKSUM") + 14}) {
            const char kept = whole[at];
            change_file(path, at, kept == 'Q' ? 'R' : 'Q');
            CHECK_FALSE(store.existing("n.fits").has_value());
            change_file(path, at, kept);
        }
        CHECK(store.existing("n.fits").has_value());
    }
    SECTION("cut short anywhere") {
        for (const std::size_t size : {std::size_t{0}, std::size_t{100}, std::size_t{2880},
                                       whole.size() / 2, whole.size() - 1}) {
            std::filesystem::resize_file(path, size);
            CHECK_FALSE(store.existing("n.fits").has_value());
            std::ofstream(path, std::ios::binary) << whole;
        }
    }
    SECTION("something else under its name") {
        std::ofstream(path, std::ios::binary) << std::string(1 << 21, 'x');
        CHECK_FALSE(store.existing("n.fits").has_value());
        std::filesystem::remove(path);
        std::filesystem::create_directory(path);
        CHECK_FALSE(store.existing("n.fits").has_value());
    }
}

TEST_CASE("The bytes of a mask file do not depend on which detector came first or on threads") {
    const test::ScratchFolder folder;
    io::MaskFolder store(folder.path());
    std::vector<DetectorMask> masks;
    for (unsigned i = 0; i < 8; ++i) {
        masks.push_back(test::textured_mask(150, 40, i));
    }
    const auto write = [&](const std::string& raw, bool threads) {
        const auto writer = store.begin(raw);
        const auto add = [&](int i) {
            writer->add(i, "d" + std::to_string(i), masks[static_cast<std::size_t>(i)],
                        wcs_cards());
        };
        if (threads) {
            std::thread odd([&] {
                for (const int i : {7, 5, 3, 1}) {
                    add(i);
                }
            });
            for (const int i : {6, 4, 2, 0}) {
                add(i);
            }
            odd.join();
        } else {
            for (int i = 0; i < 8; ++i) {
                add(i);
            }
        }
        writer->finish(awkward_tables());
        return bytes_of_file(store.path_of(raw));
    };
    CHECK(write("one.fits", false) == write("two.fits", true));
}

TEST_CASE("Where writing fails the mask that was there stays, and nothing else is left") {
    const test::ScratchFolder folder;
    io::MaskFolder store(folder.path());
    const DetectorMask mask = test::textured_mask(64, 20, 9);
    const std::string path = write_mask(store, "n.fits", mask, mask);
    const std::string before = bytes_of_file(path);
    for (const io::FileOperation fails :
         {io::FileOperation::write, io::FileOperation::sync, io::FileOperation::rename}) {
        const auto writer = store.begin("n.fits");
        writer->add(0, "d1", mask, {});
        io::set_file_fault([fails](io::FileOperation operation, const std::string&) {
            return operation == fails ? ENOSPC : 0;
        });
        CHECK_THROWS_AS(writer->finish({}), SystemError);
        io::set_file_fault(nullptr);
        CHECK(bytes_of_file(path) == before);
        CHECK(std::distance(std::filesystem::directory_iterator(folder.path()), {}) == 1);
    }
}

}  // namespace straymark
