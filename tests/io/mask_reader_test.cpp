#include "io/mask_reader.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <filesystem>
#include <fitsio.h>
#include <fstream>
#include <limits>
#include <random>
#include <sstream>
#include <sys/stat.h>

#include "core/error.h"
#include "io/mask_fixture.h"
#include "io/mask_store.h"
#include "io/outside_fits.h"

namespace straymark {
namespace {

MaskFileTables some_tables() {
    MaskFileTables tables;
    tables.primary = {{"OBS_ID", "petrel-0001", ""}, {"LONGTEXT", std::string(200, 'x'), ""}};
    tables.settings.background_px = 64;
    MarkRow mark;
    mark.kind = "crosstalk";
    mark.detector = "d1";
    mark.source = "d1/a02";
    mark.cause = "echo of d1/a02 at (101, 877)";
    mark.status = "measured";
    mark.source_x = std::numeric_limits<double>::quiet_NaN();
    mark.x = 101.25;
    mark.y = 7.0;
    mark.x1 = -1;
    mark.x2 = 2048;
    mark.y1 = 3;
    mark.y2 = 11;
    mark.strength_e = -1.0 / 3.0;
    mark.error_e = 0.01;
    mark.response = -2.5;
    mark.area_px = std::int64_t{1} << 40;
    mark.count = 7;
    tables.marks = {mark, mark};
    tables.marks[1].status = "unmeasured";
    DetectionRow amplifier;
    amplifier.detector = "d1";
    amplifier.amplifier = "a01";
    amplifier.state = "ok";
    amplifier.noise_e = 5.5;
    amplifier.gain = 1.9;
    amplifier.psf_stars = 31;
    tables.detection = {amplifier};
    tables.assessed = {{"d1", "ghost", "off", "not built yet", "", 0.0, 0.25, 0.0}};
    return tables;
}

std::string write_mask(const test::ScratchFolder& folder, const DetectorMask& mask) {
    io::MaskFolder store(folder.file("masks"));
    const auto writer = store.begin("n0001.fits");
    writer->add(0, "d1", mask, {});
    writer->finish(some_tables());
    return store.path_of("n0001.fits");
}

std::string all_bytes(const std::string& path) {
    std::ifstream file(path, std::ios::binary);
    std::ostringstream bytes;
    bytes << file.rdbuf();
    return bytes.str();
}

void write_bytes(const std::string& path, const std::string& bytes) {
    std::ofstream(path, std::ios::binary) << bytes;
}

/// The smallest file that the reader takes, by CFITSIO.
void outside_mask(const std::string& path, const std::vector<std::int16_t>& pixels, int width,
                  int height, int compression) {
    test::OutsideFits file(path);
    file.text_key("OBS_ID", "elsewhere-1");
    file.image("d9", width, height, pixels, compression);
    file.table("BITS");
    file.column("name", std::vector<std::string>{"saturated", "crosstalk_negative"});
    file.column("value", std::vector<int>{1, 8});
}

TEST_CASE("A mask file is read back as it was written") {
    const test::ScratchFolder folder;
    const DetectorMask mask = test::textured_mask(500, 60, 3);
    const io::MaskFile file(write_mask(folder, mask));
    CHECK(file.exposure() == "petrel-0001");
    CHECK(file.card("LONGTEXT") == std::string(200, 'x'));
    CHECK_FALSE(file.card("NOSUCH"));
    REQUIRE(file.images().size() == 1);
    CHECK(file.images().front().detector == "d1");
    CHECK(file.images().front().width == 500);
    CHECK(file.images().front().height == 60);
    CHECK(file.bits("d1") == mask.bits);
    // The table of docs/conventions.md.
    CHECK(file.bit_values().at("crosstalk_positive") == 4);
    CHECK(file.bit_values().at("persistence_unassessed") == 4096);
    CHECK(file.background_px() == 64);

    const std::vector<MarkRow> marks = file.marks();
    const MarkRow wanted = some_tables().marks.front();
    REQUIRE(marks.size() == 2);
    CHECK(marks[0].kind == wanted.kind);
    CHECK(marks[0].source == wanted.source);
    CHECK(marks[0].cause == wanted.cause);
    CHECK(marks[0].status == "measured");
    CHECK(marks[1].status == "unmeasured");
    CHECK(std::isnan(marks[0].source_x));
    CHECK(marks[0].x == wanted.x);
    CHECK(marks[0].y == wanted.y);
    CHECK(marks[0].x1 == -1);
    CHECK(marks[0].x2 == 2048);
    CHECK(marks[0].y1 == 3);
    CHECK(marks[0].y2 == 11);
    CHECK(marks[0].strength_e == wanted.strength_e);
    CHECK(marks[0].error_e == wanted.error_e);
    CHECK(marks[0].response == wanted.response);
    CHECK(marks[0].area_px == wanted.area_px);
    CHECK(marks[0].count == 7);

    const std::vector<DetectionRow> detection = file.detection();
    REQUIRE(detection.size() == 1);
    CHECK(detection[0].amplifier == "a01");
    CHECK(detection[0].state == "ok");
    CHECK(detection[0].noise_e == 5.5);
    CHECK(detection[0].gain == 1.9);
    CHECK(detection[0].psf_stars == 31);
    const std::vector<AssessedRow> assessed = file.assessed();
    REQUIRE(assessed.size() == 1);
    CHECK(assessed[0].predictor == "ghost");
    CHECK(assessed[0].marginal_fraction == 0.25);
}

TEST_CASE("Masks of another writer are read, plain and compressed") {
    const test::ScratchFolder folder;
    std::mt19937 random(5);
    std::vector<std::int16_t> pixels(90 * 40);
    for (std::int16_t& pixel : pixels) {
        pixel = static_cast<std::int16_t>(random() % 9 == 0 ? random() % 8192 : 0);
    }
    for (const int compression : {0, GZIP_2, RICE_1}) {
        const std::string path = folder.file(std::to_string(compression) + ".fits");
        outside_mask(path, pixels, 90, 40, compression);
        const io::MaskFile file(path);
        CHECK(file.exposure() == "elsewhere-1");
        CHECK(file.bits("d9") == pixels);
        CHECK(file.bit_values() ==
              std::map<std::string, std::int32_t>{{"saturated", 1}, {"crosstalk_negative", 8}});
        CHECK_THROWS_AS(file.marks(), InputError);
        CHECK_THROWS_AS(file.bits("d8"), InputError);
    }
}

TEST_CASE("A damaged byte is an error, never another mask") {
    const test::ScratchFolder folder;
    const DetectorMask mask = test::textured_mask(300, 30, 4);
    const std::string path = write_mask(folder, mask);
    const std::string whole = all_bytes(path);
    std::mt19937 random(17);
    for (int trial = 0; trial < 300; ++trial) {
        std::string damaged = whole;
        damaged[random() % damaged.size()] ^= static_cast<char>(1 << (random() % 8));
        write_bytes(path, damaged);
        CHECK_THROWS_AS(io::MaskFile(path), InputError);
    }
    for (const std::size_t length :
         {std::size_t{0}, std::size_t{100}, whole.size() / 2, whole.size() - 2880}) {
        write_bytes(path, whole.substr(0, length));
        CHECK_THROWS_AS(io::MaskFile(path), InputError);
    }
    write_bytes(path, whole);
    CHECK(io::MaskFile(path).bits("d1") == mask.bits);
}

TEST_CASE("What is not a mask is refused, by what is wrong") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("x.fits");
    CHECK_THROWS_WITH(io::MaskFile(folder.file("missing.fits")), Catch::Contains("missing.fits"));
    CHECK_THROWS_AS(io::MaskFile(folder.path()), InputError);
    REQUIRE(::mkfifo(folder.file("pipe.fits").c_str(), 0600) == 0);
    CHECK_THROWS_AS(io::MaskFile(folder.file("pipe.fits")), InputError);  // and does not wait
    write_bytes(path, "\x1f\x8b\x08" + std::string(4000, 'a'));
    CHECK_THROWS_AS(io::MaskFile(path), InputError);
    SECTION("no exposure") {
        {
            test::OutsideFits file(folder.file("a.fits"));
            file.table("BITS");
            file.column("name", std::vector<std::string>{"ghost"});
        }
        CHECK_THROWS_WITH(io::MaskFile(folder.file("a.fits")), Catch::Contains("OBS_ID"));
    }
    SECTION("pixels of another type") {
        {
            test::OutsideFits file(folder.file("a.fits"));
            file.text_key("OBS_ID", "e");
            file.image("d1", 3, 2, std::vector<int>(6, 1));
            file.table("BITS");
            file.column("name", std::vector<std::string>{"ghost"});
        }
        const io::MaskFile file(folder.file("a.fits"));
        CHECK_THROWS_WITH(file.bits("d1"), Catch::Contains("16-bit"));
    }
    SECTION("a number that is not whole, or not finite") {
        for (const double value : {0.5, 1e300, std::numeric_limits<double>::quiet_NaN()}) {
            std::filesystem::remove(folder.file("a.fits"));
            {
                test::OutsideFits file(folder.file("a.fits"));
                file.text_key("OBS_ID", "e");
                file.table("BITS");
                file.column("name", std::vector<std::string>{"ghost"});
                file.column("value", std::vector<double>{value});
            }
            const io::MaskFile file(folder.file("a.fits"));
            CHECK_THROWS_AS(file.bit_values(), InputError);
        }
    }
}

}  // namespace
}  // namespace straymark
