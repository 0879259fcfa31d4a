#include <catch2/catch.hpp>
#include <cmath>
#include <fitsio.h>

#include "core/error.h"
#include "io/raw_reader.h"
#include "io/raw_support.h"

using namespace straymark;
using namespace straymark::io;
using namespace straymark::test;

namespace {

const std::string kReference = std::string(STRAYMARK_TEST_DATA) + "/reference/";
const std::string kRealFrame = kReference + "real_frames/saao_ste3_raw_a8280271.fits";

/// The camera of the real frame, as its header describes it.
Camera real_camera() {
    Camera camera = small_camera();
    camera.filters = {{"48", {}}};
    camera.headers.id = "OBJECT";
    camera.headers.start = {"DATE-OBS", "UT"};
    camera.headers.filter = "FILTERS";
    camera.headers.temperature = "CCD-TEMP";
    camera.raw.hdu = "primary";
    camera.raw.data = "TRIMSEC";
    camera.raw.bias = "BIASSEC";
    camera.raw.order = PixelOrder::detector;
    Detector& detector = camera.detectors[0];
    detector.width = 512;
    detector.height = 520;
    detector.amplifiers = {half_detector("a01", "", {0, 0, 512, 520}, Corner::lower_left, 16)};
    return camera;
}

}  // namespace

TEST_CASE("The real raw frame is read with its pointing, time and sections") {
    const Camera camera = real_camera();
    const auto reader = make_raw_reader(camera);
    const RawFile file = reader->inspect(kRealFrame);
    CHECK(file.detectors == std::vector<int>{0});
    CHECK(file.header.filter == "48");
    CHECK(file.header.exposure_s == 150.04);
    CHECK(file.header.type == ExposureType::sky);
    CHECK(file.header.temperature == 180.2);
    // 2013-07-13 is MJD 56486, as its own MJD-OBS says; UT 00:57:33. Absolute: 1 ms.
    CHECK(file.header.start.days ==
          Approx(56486.0 + 3453.0 / 86400).margin(1e-3 / 86400).epsilon(0));
    AmplifierFrame frame;
    reader->open(file, 0)->read(0, frame);
    // TRIMSEC [17:528,1:520], BIASSEC [4:13,1:520]; the frame begins at column 4.
    CHECK(frame.data == PixelBox{13, 0, 525, 520});
    CHECK(frame.overscan == std::vector<PixelBox>{{0, 0, 10, 520}});
    CHECK(frame.readout_from_file(13, 0) == ReadoutIndex{16, 0});
}

TEST_CASE("The real raw frame has the pixels that cfitsio reads") {
    const Camera camera = real_camera();
    const auto reader = make_raw_reader(camera);
    AmplifierFrame frame;
    reader->open(reader->inspect(kRealFrame), 0)->read(0, frame);
    constexpr int kWidth = 536;
    constexpr int kHeight = 520;
    std::vector<float> all(kWidth * kHeight);
    int status = 0;
    fitsfile* fits = nullptr;
    fits_open_diskfile(&fits, kRealFrame.c_str(), READONLY, &status);
    fits_read_img(fits, TFLOAT, 1, kWidth * kHeight, nullptr, all.data(), nullptr, &status);
    fits_close_file(fits, &status);
    REQUIRE(status == 0);
    int different = 0;
    for (int y = 0; y < kHeight; ++y) {
        for (int x = 3; x < 528; ++x) {
            const auto here = static_cast<std::size_t>(y * frame.width + x - 3);
            different += frame.pixels[here] != all[static_cast<std::size_t>(y * kWidth + x)];
        }
    }
    CHECK(different == 0);
}

TEST_CASE("The real frame is refused where the camera file misreads its header") {
    Camera camera = real_camera();
    camera.headers.start = {"DATE-OBS", {}};
    CHECK_THROWS_WITH(make_raw_reader(camera)->inspect(kRealFrame),
                      Catch::Contains("a date without a time"));
    camera = real_camera();
    camera.headers.filter = "FILTER";
    CHECK_THROWS_WITH(make_raw_reader(camera)->inspect(kRealFrame),
                      Catch::Contains("keyword FILTER"));
}

TEST_CASE("A real header without pixels is refused as that") {
    Camera camera = real_camera();
    CHECK_THROWS_WITH(
        make_raw_reader(camera)->inspect(kReference + "wcs/mosaic_header_tpv_two_amplifiers.fits"),
        Catch::Contains("no image of this camera"));
}

TEST_CASE("A real cut of an amplifier is refused: its sections describe the whole image") {
    Camera camera = real_camera();
    camera.raw.data = "DATASEC";
    CHECK_THROWS_WITH(make_raw_reader(camera)->inspect(
                          kReference + "wcs/amplifier_cut_tnx_reversed_section.fits"),
                      Catch::Contains("[25:1048,1:4096]") && Catch::Contains("400 x 400"));
}

TEST_CASE("A real header alone is refused as truncated") {
    const Camera camera = real_camera();
    for (const char* name : {"same_solution_tpv.hdr", "same_solution_sip.hdr"}) {
        CHECK_THROWS_AS(make_raw_reader(camera)->inspect(kReference + "wcs/" + name), InputError);
    }
}
