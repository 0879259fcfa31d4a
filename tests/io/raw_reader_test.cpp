#include "io/raw_reader.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <fstream>
#include <map>

#include "core/error.h"
#include "io/raw_support.h"

using namespace straymark;
using namespace straymark::test;

namespace {

using Cards = std::vector<std::string>;

/// What a frame says of its data pixels: value by read-out index.
std::map<std::pair<int, int>, float> by_readout(const AmplifierFrame& frame) {
    std::map<std::pair<int, int>, float> values;
    for (int j = frame.data.y0; j < frame.data.y1; ++j) {
        for (int i = frame.data.x0; i < frame.data.x1; ++i) {
            const ReadoutIndex index = frame.readout_from_file(i, j);
            values[{index.tick, index.row}] =
                frame.pixels[static_cast<std::size_t>(j * frame.width + i)];
        }
    }
    return values;
}

/// A file of d1 with both amplifiers 4 x 6, `left` and `right` more cards of theirs.
std::string two_amplifiers(const Cards& left, const Cards& right, int width = 4, int height = 6) {
    FitsBuilder builder(exposure_cards());
    builder.image("d1_a01", width, height, place_pixels(width, height), left)
        .image("d1_a02", width, height, place_pixels(width, height), right);
    return builder.bytes();
}

std::string fault_of(const Camera& camera, const std::string& bytes) {
    const TemporaryFolder folder;
    const std::string path = folder.write("raw.fits", bytes);
    const auto reader = io::make_raw_reader(camera);
    try {
        const RawFile file = reader->inspect(path);
    } catch (const InputError& error) {
        return error.what();
    }
    return "no error";
}

AmplifierFrame frame_of(const Camera& camera, const std::string& bytes, int amplifier) {
    const TemporaryFolder folder;
    const auto reader = io::make_raw_reader(camera);
    const RawFile file = reader->inspect(folder.write("raw.fits", bytes));
    AmplifierFrame frame;
    reader->open(file, 0)->read(amplifier, frame);
    return frame;
}

bool mentions(const std::string& text, const std::string& part) {
    return text.find(part) != std::string::npos;
}

const Cards kWholeData{text_card("DATASEC", "[1:4,1:6]")};

}  // namespace

TEST_CASE("In read-out order the first pixel of the data section is the first one read") {
    Camera camera = small_camera(1, 2);
    camera.raw.bias = "BIASSEC";
    camera.raw.prescan = "PRESEC";
    // 2 columns of prescan, 4 of data, 3 of overscan.
    const Cards cards{text_card("DATASEC", "[3:6,1:6]"), text_card("PRESEC", "[1:2,1:6]"),
                      text_card("BIASSEC", "[ 7: 9, 1: 6]")};
    const AmplifierFrame frame = frame_of(camera, two_amplifiers(cards, cards, 9, 6), 1);
    CHECK(frame.width == 9);
    CHECK(frame.height == 6);
    CHECK(frame.data == PixelBox{2, 0, 6, 6});
    CHECK(frame.prescan == std::vector<PixelBox>{{0, 0, 2, 6}});
    CHECK(frame.overscan == std::vector<PixelBox>{{6, 0, 9, 6}});
    const auto values = by_readout(frame);
    REQUIRE(values.size() == 24);
    // Ticks count the prescan: the first data pixel has tick 2, row 0; FITS pixel (3, 1).
    CHECK(values.at({2, 0}) == 1003.0F);
    CHECK(values.at({5, 0}) == 1006.0F);
    CHECK(values.at({2, 5}) == 6003.0F);
}

TEST_CASE("In detector order the corner decides which pixel was read first") {
    Camera camera = small_camera();
    camera.raw.order = PixelOrder::detector;
    const std::string bytes = two_amplifiers(kWholeData, kWholeData);
    const auto left = by_readout(frame_of(camera, bytes, 0));
    CHECK(left.at({0, 0}) == 1001.0F);
    CHECK(left.at({3, 0}) == 1004.0F);
    CHECK(left.at({0, 5}) == 6001.0F);
    // a02 is read from the upper right: FITS pixel (4, 6) first, then (3, 6).
    const auto right = by_readout(frame_of(camera, bytes, 1));
    CHECK(right.at({0, 0}) == 6004.0F);
    CHECK(right.at({1, 0}) == 6003.0F);
    CHECK(right.at({0, 1}) == 5004.0F);
    CHECK(right.at({3, 5}) == 1001.0F);
}

TEST_CASE("A detector section is obeyed, and a reversed range means flipped") {
    Camera camera = small_camera();
    camera.raw.order = PixelOrder::unstated;
    camera.raw.detector_section = "DETSEC";
    Cards left = kWholeData;
    left.push_back(text_card("DETSEC", "[1:4,1:6]"));
    Cards right = kWholeData;
    // The first file pixel lies at detector column 8 and row 6: this file is in read-out order.
    right.push_back(text_card("DETSEC", "[8:5,6:1]"));
    const std::string bytes = two_amplifiers(left, right);
    CHECK(by_readout(frame_of(camera, bytes, 0)).at({0, 0}) == 1001.0F);
    const auto flipped = by_readout(frame_of(camera, bytes, 1));
    CHECK(flipped.at({0, 0}) == 1001.0F);
    CHECK(flipped.at({3, 0}) == 1004.0F);
    CHECK(flipped.at({0, 5}) == 6001.0F);
    // Reversed in one axis alone: file column 1 is the last read, row 1 the first.
    Cards half = kWholeData;
    half.push_back(text_card("DETSEC", "[5:8,6:1]"));
    const auto half_flipped = by_readout(frame_of(camera, two_amplifiers(left, half), 1));
    CHECK(half_flipped.at({0, 0}) == 1004.0F);
    CHECK(half_flipped.at({3, 0}) == 1001.0F);
    CHECK(half_flipped.at({0, 5}) == 6004.0F);
}

TEST_CASE("A reversed data section flips once more") {
    Camera camera = small_camera();
    camera.raw.detector_section = "DETSEC";
    const Cards cards{text_card("DATASEC", "[4:1,1:6]"), text_card("DETSEC", "[4:1,1:6]")};
    const Cards other{text_card("DATASEC", "[1:4,1:6]"), text_card("DETSEC", "[5:8,1:6]")};
    const auto values = by_readout(frame_of(camera, two_amplifiers(cards, other), 0));
    // DATASEC's 4 goes with DETSEC's 4: the two reversals undo each other.
    CHECK(values.at({0, 0}) == 1001.0F);
}

TEST_CASE("Rows shifted out along y have their ticks along the columns of the detector") {
    Camera camera = small_camera();
    camera.raw.order = PixelOrder::detector;
    camera.detectors[0].serial = SerialAxis::y;
    for (Amplifier& amplifier : camera.detectors[0].amplifiers) {
        amplifier.readout = {amplifier.readout.section(), Corner::lower_left, SerialAxis::y, 0};
    }
    const auto values = by_readout(frame_of(camera, two_amplifiers(kWholeData, kWholeData), 0));
    CHECK(values.at({1, 0}) == 2001.0F);  // one tick later: one pixel higher
    CHECK(values.at({0, 1}) == 1002.0F);
    // In read-out order the file's first axis is the ticks': 6 wide and 4 high.
    camera.raw.order = PixelOrder::readout;
    const Cards turned{text_card("DATASEC", "[1:6,1:4]")};
    const auto as_read = by_readout(frame_of(camera, two_amplifiers(turned, turned, 6, 4), 0));
    CHECK(as_read.at({1, 0}) == 1002.0F);
    CHECK(as_read.at({0, 1}) == 2001.0F);
    CHECK(mentions(fault_of(camera, two_amplifiers(kWholeData, kWholeData)), "expected 6 x 4"));
}

TEST_CASE("A window shifts the read-out index and is noted") {
    Camera camera = small_camera();
    camera.raw.detector_section = "DETSEC";
    const Cards left{text_card("DATASEC", "[1:2,1:3]"), text_card("DETSEC", "[2:3,3:5]")};
    const Cards right{text_card("DATASEC", "[1:2,1:3]"), text_card("DETSEC", "[6:7,3:5]")};
    const TemporaryFolder folder;
    const auto reader = io::make_raw_reader(camera);
    const RawFile file =
        reader->inspect(folder.write("raw.fits", two_amplifiers(left, right, 2, 3)));
    CHECK(file.notes.size() >= 2);
    CHECK(mentions(file.notes[0], "window"));
    AmplifierFrame frame;
    reader->open(file, 0)->read(0, frame);
    CHECK(by_readout(frame).at({1, 2}) == 1001.0F);
    // a02 from the upper right: detector pixel (7, 5), FITS, is its tick 1, row 1.
    reader->open(file, 0)->read(1, frame);
    CHECK(by_readout(frame).at({1, 1}) == 3002.0F);
}

TEST_CASE("Without a statement of the pixel order a file is refused") {
    Camera camera = small_camera();
    camera.raw.order = PixelOrder::unstated;
    CHECK(mentions(fault_of(camera, two_amplifiers(kWholeData, kWholeData)), "pixel order"));
}

TEST_CASE("Sizes that disagree with the camera file are refused, binned ones by that name") {
    const Camera camera = small_camera();
    const Cards narrow{text_card("DATASEC", "[1:3,1:6]")};
    const std::string fault = fault_of(camera, two_amplifiers(kWholeData, narrow));
    CHECK(mentions(fault, "HDU 2 (d1_a02), keyword DATASEC"));
    CHECK(mentions(fault, "3 x 6"));
    CHECK(mentions(fault, "expected 4 x 6"));
    CHECK_FALSE(mentions(fault, "binned"));
    const Cards half{text_card("DATASEC", "[1:2,1:3]")};
    CHECK(mentions(fault_of(camera, two_amplifiers(half, half, 2, 3)), "binned 2 x 2"));
    Camera by_section = small_camera();
    by_section.raw.detector_section = "DETSEC";
    const Cards binned{text_card("DATASEC", "[1:2,1:3]"), text_card("DETSEC", "[1:4,1:6]")};
    CHECK(mentions(fault_of(by_section, two_amplifiers(binned, binned, 2, 3)), "binned 2 x 2"));
}

TEST_CASE("A section outside its image is refused") {
    const Cards outside{text_card("DATASEC", "[2:5,1:6]")};
    const std::string fault = fault_of(small_camera(), two_amplifiers(kWholeData, outside));
    CHECK(mentions(fault, "[2:5,1:6]"));
    CHECK(mentions(fault, "4 x 6"));
}

TEST_CASE("A malformed, missing or unclosed section is refused with its keyword") {
    const Camera camera = small_camera();
    CHECK(mentions(fault_of(camera, two_amplifiers(kWholeData, {text_card("DATASEC", "[1:4]")})),
                   "keyword DATASEC: found '[1:4]'"));
    CHECK(mentions(fault_of(camera, two_amplifiers(kWholeData, {})), "no such card"));
    const Cards unclosed{fmt::format("{:<80}", "DATASEC = '[1:4,1:6]")};
    CHECK(mentions(fault_of(camera, two_amplifiers(kWholeData, unclosed)), "keyword DATASEC"));
}

TEST_CASE("Swapped HDUs are seen by their detector sections") {
    Camera camera = small_camera();
    camera.raw.detector_section = "DETSEC";
    const Cards left{text_card("DATASEC", "[1:4,1:6]"), text_card("DETSEC", "[1:4,1:6]")};
    const Cards right{text_card("DATASEC", "[1:4,1:6]"), text_card("DETSEC", "[5:8,1:6]")};
    CHECK(fault_of(camera, two_amplifiers(left, right)) == "no error");
    const std::string fault = fault_of(camera, two_amplifiers(right, left));
    CHECK(mentions(fault, "swapped"));
    CHECK(mentions(fault, "d1/a01"));
    CHECK(mentions(fault, "[5:8,1:6]"));
}

TEST_CASE("The prescan in the header must be that of the camera file, and on its side") {
    Camera camera = small_camera(1, 2);
    camera.raw.prescan = "PRESEC";
    const auto cards = [](const char* prescan) {
        return Cards{text_card("DATASEC", "[3:6,1:6]"), text_card("PRESEC", prescan)};
    };
    CHECK(fault_of(camera, two_amplifiers(cards("[1:2,1:6]"), cards("[1:2,1:6]"), 9, 6)) ==
          "no error");
    CHECK(mentions(fault_of(camera, two_amplifiers(cards("[2:2,1:6]"), cards("[1:2,1:6]"), 9, 6)),
                   "found 1 pixels of prescan; expected 2"));
    CHECK(mentions(fault_of(camera, two_amplifiers(cards("[7:8,1:6]"), cards("[1:2,1:6]"), 9, 6)),
                   "read first"));
    CHECK(mentions(fault_of(camera, two_amplifiers(cards("[2:3,1:6]"), cards("[1:2,1:6]"), 9, 6)),
                   "outside the data section"));
}

TEST_CASE("An HDU that the camera file does not know is noted") {
    const TemporaryFolder folder;
    FitsBuilder builder(exposure_cards());
    builder.image("d1_a01", 4, 6, place_pixels(4, 6), kWholeData)
        .image("d1_a02", 4, 6, place_pixels(4, 6), kWholeData)
        .image("guide7", 4, 6, place_pixels(4, 6));
    const Camera camera = small_camera();
    const RawFile file =
        io::make_raw_reader(camera)->inspect(folder.write("raw.fits", builder.bytes()));
    REQUIRE_FALSE(file.notes.empty());
    CHECK(mentions(file.notes[0], "HDU 3 (guide7)"));
}

TEST_CASE("A missing HDU costs its amplifier, not the detector") {
    const TemporaryFolder folder;
    FitsBuilder builder(exposure_cards());
    builder.image("d1_a02", 4, 6, place_pixels(4, 6), kWholeData);
    const Camera camera = small_camera(2);
    const auto reader = io::make_raw_reader(camera);
    const RawFile file = reader->inspect(folder.write("raw.fits", builder.bytes()));
    CHECK(file.detectors == std::vector<int>{0});
    REQUIRE_FALSE(file.notes.empty());
    CHECK(mentions(file.notes[0], "d1/a01: no HDU named d1_a01"));
    AmplifierFrame frame;
    const auto detector = reader->open(file, 0);
    CHECK_NOTHROW(detector->read(1, frame));
    CHECK_THROWS_AS(detector->read(0, frame), InputError);
}

TEST_CASE("A file without any HDU of the camera is refused with the names expected") {
    FitsBuilder builder(exposure_cards());
    builder.image("im1", 4, 6, place_pixels(4, 6));
    CHECK(mentions(fault_of(small_camera(), builder.bytes()), "d1_a01"));
}

TEST_CASE("Two HDUs of one name are refused") {
    FitsBuilder builder(exposure_cards());
    builder.image("d1_a01", 4, 6, place_pixels(4, 6), kWholeData)
        .image("D1_A01", 4, 6, place_pixels(4, 6), kWholeData);
    CHECK(mentions(fault_of(small_camera(), builder.bytes()), "twice"));
}

TEST_CASE("One image of the trimmed detector holds every amplifier at its section") {
    Camera camera = small_camera();
    camera.raw.hdu = "{detector}";
    camera.raw.data.reset();
    camera.raw.order = PixelOrder::detector;
    FitsBuilder builder(exposure_cards());
    builder.image("D1", 8, 6, place_pixels(8, 6));
    const AmplifierFrame right = frame_of(camera, builder.bytes(), 1);
    CHECK(right.width == 4);
    const auto values = by_readout(right);
    REQUIRE(values.size() == 24);
    CHECK(values.at({0, 0}) == 6008.0F);  // the upper right corner, FITS (8, 6)
    CHECK(values.at({3, 5}) == 1005.0F);
    camera.raw.order = PixelOrder::readout;
    CHECK(mentions(fault_of(camera, builder.bytes()), "order: detector"));
}

TEST_CASE("A detector section may turn one image of all amplifiers round") {
    Camera camera = small_camera();
    camera.raw.hdu = "{detector}";
    camera.raw.data.reset();
    camera.raw.detector_section = "DETSEC";
    FitsBuilder builder(exposure_cards());
    // The file's first pixel is the detector's last: FITS (8, 6).
    builder.image("D1", 8, 6, place_pixels(8, 6), {text_card("DETSEC", "[8:1,6:1]")});
    const auto left = by_readout(frame_of(camera, builder.bytes(), 0));
    REQUIRE(left.size() == 24);
    CHECK(left.at({0, 0}) == 6008.0F);
    CHECK(left.at({3, 5}) == 1005.0F);
    const auto right = by_readout(frame_of(camera, builder.bytes(), 1));
    CHECK(right.at({0, 0}) == 1001.0F);
    CHECK(right.at({3, 5}) == 6004.0F);
    // The same with a lower and an upper half.
    camera.detectors[0].amplifiers = {
        half_detector("a01", "A", {0, 0, 8, 3}, Corner::lower_left, 0),
        half_detector("a02", "B", {0, 3, 8, 6}, Corner::upper_right, 0)};
    const auto lower = by_readout(frame_of(camera, builder.bytes(), 0));
    REQUIRE(lower.size() == 24);
    CHECK(lower.at({0, 0}) == 6008.0F);
    CHECK(lower.at({7, 2}) == 4001.0F);
    CHECK(by_readout(frame_of(camera, builder.bytes(), 1)).at({7, 2}) == 3008.0F);
}

TEST_CASE("Sections with a suffix for each amplifier place several amplifiers in one image") {
    // As one real mosaic camera writes them (tests/reference/wcs).
    Camera camera = small_camera();
    camera.raw.hdu = "primary";
    camera.raw.data = "DATASEC{suffix}";
    camera.raw.bias = "BIASSEC{suffix}";
    camera.raw.detector_section = "CCDSEC{suffix}";
    std::vector<std::string> cards = exposure_cards();
    for (const auto& [keyword, section] :
         std::vector<std::pair<const char*, const char*>>{{"DATASECA", "[3:6,1:6]"},
                                                          {"BIASSECA", "[1:2,1:6]"},
                                                          {"CCDSECA", "[1:4,1:6]"},
                                                          {"DATASECB", "[7:10,1:6]"},
                                                          {"BIASSECB", "[11:12,1:6]"},
                                                          {"CCDSECB", "[5:8,1:6]"}}) {
        cards.push_back(text_card(keyword, section));
    }
    const std::string bytes =
        FitsBuilder::primary_image<std::int16_t>(12, 6, place_pixels(12, 6), cards).bytes();
    const AmplifierFrame right = frame_of(camera, bytes, 1);
    CHECK(right.width == 6);
    CHECK(right.data == PixelBox{0, 0, 4, 6});
    CHECK(right.overscan == std::vector<PixelBox>{{4, 0, 6, 6}});
    CHECK(by_readout(right).at({0, 0}) == 6010.0F);
    const AmplifierFrame left = frame_of(camera, bytes, 0);
    CHECK(left.data == PixelBox{2, 0, 6, 6});
    CHECK(by_readout(left).at({0, 0}) == 1003.0F);
}

TEST_CASE("Amplifiers can be named by their running number") {
    Camera camera = small_camera(2);
    camera.raw.hdu = "im{number}";
    FitsBuilder builder(exposure_cards());
    for (int i = 1; i <= 4; ++i) {
        builder.image(fmt::format("im{}", i), 4, 6, std::vector<std::int32_t>(24, i), kWholeData);
    }
    const TemporaryFolder folder;
    const auto reader = io::make_raw_reader(camera);
    const RawFile file = reader->inspect(folder.write("raw.fits", builder.bytes()));
    CHECK(file.detectors == std::vector<int>{0, 1});
    AmplifierFrame frame;
    reader->open(file, 1)->read(0, frame);
    CHECK(frame.pixels[0] == 3.0F);
}

TEST_CASE("An image far larger than the camera's detectors is refused") {
    FitsBuilder builder(exposure_cards());
    builder.image("d1_a01", 5000, 6, std::vector<std::int16_t>(30000, 0), kWholeData);
    CHECK(mentions(fault_of(small_camera(), builder.bytes()), "5000 x 6"));
}

TEST_CASE("A file that changes after the look at it is not read") {
    const Camera camera = small_camera();
    const TemporaryFolder folder;
    const std::string bytes = two_amplifiers(kWholeData, kWholeData);
    const std::string path = folder.write("raw.fits", bytes);
    const auto reader = io::make_raw_reader(camera);
    const RawFile file = reader->inspect(path);
    const auto frame_before = reader->open(file, 0);
    std::ofstream(path, std::ios::app | std::ios::binary) << "more";
    CHECK_THROWS_WITH(reader->open(file, 0), Catch::Contains("still growing"));
    AmplifierFrame frame;
    CHECK_THROWS_WITH(frame_before->read(0, frame), Catch::Contains("still growing"));
    // Looked at again, it is the new file; the bytes behind the last HDU are noted.
    CHECK(reader->inspect(path).digest != file.digest);
}

TEST_CASE("The WCS of a raw image is moved to the detector's own pixels") {
    Camera camera = small_camera();
    camera.raw.hdu = "primary";
    camera.raw.data = "DATASEC";
    camera.raw.order = PixelOrder::detector;
    // An image alone on its detector: one amplifier.
    camera.detectors[0].amplifiers.resize(1);
    camera.detectors[0].amplifiers[0].readout = {PixelBox{0, 0, 8, 6}, Corner::lower_left,
                                                 SerialAxis::x, 0};
    std::vector<std::string> cards = exposure_cards();
    cards.push_back(text_card("DATASEC", "[4:11,2:7]"));
    cards.push_back(card("CRPIX1", "100.5"));
    cards.push_back(card("CRPIX2", "-7.25"));
    const TemporaryFolder folder;
    const auto reader = io::make_raw_reader(camera);
    const RawFile file = reader->inspect(folder.write(
        "raw.fits",
        FitsBuilder::primary_image<std::int16_t>(12, 8, place_pixels(12, 8), cards).bytes()));
    const std::vector<std::string> wcs = reader->open(file, 0)->wcs_cards();
    const io::FitsHeader header([&] {
        std::string all;
        for (const std::string& one : wcs) {
            REQUIRE(one.size() == 80);
            all += one;
        }
        return all;
    }());
    // Image pixel (4, 2) is detector pixel (1, 1).
    CHECK(header.find("CRPIX1")->number() == 97.5);
    CHECK(header.find("CRPIX2")->number() == -8.25);
}
