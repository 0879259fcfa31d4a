#include "io/site_file.h"

#include <catch2/catch.hpp>

#include "core/error.h"
#include "io/camera_file.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::io;
using straymark::test::contents;
using straymark::test::TemporaryFolder;
using straymark::test::with;

namespace {

const std::string kCameraFiles = std::string(STRAYMARK_TEST_DATA) + "/camera_files/";

/// Loads the example site with one change to one of its files.
std::string message_of_change(const std::string& from, const std::string& to,
                              const std::string& file = "petrel_site.yaml") {
    const TemporaryFolder folder;
    for (const char* name : {"petrel.yaml", "petrel_amplifiers.csv", "petrel_pairs.csv",
                             "petrel_defects.csv", "petrel_site.yaml"}) {
        const std::string text = contents(kCameraFiles + name);
        folder.write(name, name == file ? with(text, from, to) : text);
    }
    try {
        (void)load_site(folder.file("petrel_site.yaml"));
    } catch (const InputError& error) {
        return error.what();
    }
    return "no error";
}

}  // namespace

TEST_CASE("the example site is read, its paths beside it") {
    const Site site = load_site(kCameraFiles + "petrel_site.yaml");
    CHECK(site.path == kCameraFiles + "petrel_site.yaml");
    CHECK(site.camera_path == kCameraFiles + "petrel.yaml");
    CHECK(site.calibrations_path == kCameraFiles + "calib/");
    CHECK(site.stars_path == kCameraFiles + "stars.fits");
    CHECK(site.history_path == kCameraFiles + "history.sqlite");
    CHECK(site.masks_path == kCameraFiles + "masks/");
    CHECK(site.digests_path == kCameraFiles + "digests/");
    CHECK(site.camera.name == "petrel");
    // persistence is not given: its default, 1.
    CHECK(site.decision.threshold == std::array{0.5, 1.0, 2.0, 1.0});
    CHECK(site.decision.background_px == 64);
    CHECK(site.decision.template_noise == 0.3);
    CHECK(site.predictor_on == std::array{true, true, true, false});
    CHECK(site.accept_unassessed_fraction == 0.05);
}

TEST_CASE("defects are FITS pixels in the file and 0-based boxes inside") {
    const Site site = load_site(kCameraFiles + "petrel_site.yaml");
    REQUIRE(site.defects.size() == 2);
    CHECK(site.defects.at(0) == std::vector<PixelBox>{{100, 0, 101, 2048}, {699, 1499, 703, 1510}});
    CHECK(site.defects.at(3) == std::vector<PixelBox>{{2047, 2047, 2048, 2048}});
    CHECK(site.defects_digest.starts_with("xxh128:"));
}

TEST_CASE("a short site file has the documented defaults") {
    const TemporaryFolder folder;
    const std::string path = folder.write(
        "site.yaml", "format: straymark-site/1\ncamera: " + kCameraFiles + "petrel.yaml\n" +
                         "calibrations: c\nstars: /data/s.fits\n"
                         "history: h\nmasks: m\ndigests: d\n");
    const Site site = load_site(path);
    CHECK(site.camera_path == kCameraFiles + "petrel.yaml");
    CHECK(site.stars_path == "/data/s.fits");
    CHECK_FALSE(site.defects_path.has_value());
    CHECK(site.defects.empty());
    CHECK(site.defects_digest.empty());
    CHECK(site.decision.threshold == std::array{1.0, 1.0, 1.0, 1.0});
    CHECK(site.decision.background_px == 0);
    CHECK(site.decision.template_noise == 0.0);
    CHECK(site.predictor_on == std::array{true, true, true, true});
    CHECK(site.accept_unassessed_fraction == 0.02);
}

TEST_CASE("predictors are on or off, also as other YAML tools write it") {
    CHECK(message_of_change("persistence: off", "persistence: \"off\"") == "no error");
    CHECK(message_of_change("persistence: off", "persistence: false") == "no error");
    CHECK_THAT(message_of_change("persistence: off", "persistence: no"),
               Catch::Contains("one of: on, off"));
    CHECK_THAT(message_of_change("persistence: off", "persistance: off"),
               Catch::Contains("did you mean 'persistence'?"));
}

TEST_CASE("site settings outside their ranges are refused where they stand") {
    const std::vector<std::pair<std::string, std::string>> changes{
        {"crosstalk: 0.5", "crosstalk: 0"},
        {"crosstalk: 0.5", "crosstalk: -1"},
        {"crosstalk: 0.5", "crosstalk: .inf"},
        {"crosstalk: 0.5", "cross_talk: 0.5"},
        {"template_noise: 0.3", "template_noise: -0.1"},
        {"template_noise: 0.3", "template_noise: \"0.3\""},
        {"background_px: 64", "background_px: 64.5"},
        {"background_px: 64", "background_px: -1"},
        {"unassessed_fraction: 0.05", "unassessed_fraction: 2"},
        {"stars: stars.fits", "stars: [stars.fits]"},
        {"stars: stars.fits", "stars: 12"},
        {"stars: stars.fits", "stars:"},
        {"masks: masks/\n", ""},
        {"masks: masks/", "masks: masks/\nmasks: other/"}};
    for (const auto& [from, to] : changes) {
        INFO(to);
        CHECK_THAT(message_of_change(from, to), Catch::Contains("petrel_site.yaml: line "));
    }
}

TEST_CASE("a site's camera and defects are checked with it") {
    CHECK_THAT(message_of_change("camera: petrel.yaml", "camera: puffin.yaml"),
               Catch::Contains("puffin.yaml") && Catch::Contains("No such file"));
    CHECK_THAT(message_of_change("camera: petrel.yaml", "camera: petrel_site.yaml"),
               Catch::Contains("found straymark-site/1; expected format: straymark-camera/1"));
    CHECK_THAT(message_of_change("parity: 1", "parity: 3", "petrel.yaml"),
               Catch::Contains("petrel.yaml: line"));
    const std::string defects = "petrel_defects.csv";
    CHECK_THAT(message_of_change("d1,101,101,1,2048", "d1,101,101,1,2049", defects),
               Catch::Contains("line 2, column 'y2'") && Catch::Contains("from 1 to 2048"));
    CHECK_THAT(message_of_change("d1,101,101,1,2048", "d1,0,101,1,2048", defects),
               Catch::Contains("column 'x1'"));
    CHECK_THAT(message_of_change("d1,101,101,1,2048", "d1,102,101,1,2048", defects),
               Catch::Contains("column 'x2'"));
    CHECK_THAT(message_of_change("d1,101,101,1,2048", "d7,101,101,1,2048", defects),
               Catch::Contains("a detector of camera petrel"));
    CHECK_THAT(message_of_change("d1,101,101,1,2048", "d1,101.5,102,1,2048", defects),
               Catch::Contains("a whole number"));
}
