#include "io/scenario_file.h"

#include <catch2/catch.hpp>
#include <string>

#include "core/error.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::io;
using straymark::test::contents;
using straymark::test::TemporaryFolder;
using straymark::test::with;

namespace {

const std::string kScenario = std::string(STRAYMARK_TEST_DATA) + "/scenarios/small.yaml";

/// What the reader says of the small scenario with one text replaced.
std::string message(const std::string& from, const std::string& to) {
    const TemporaryFolder folder;
    const std::string path = folder.write("scenario.yaml", with(contents(kScenario), from, to));
    try {
        (void)read_scenario(path);
    } catch (const InputError& error) {
        return error.what();
    }
    return "";
}

}  // namespace

TEST_CASE("the demo's scenario and the tests' are read") {
    const simulate::Scenario small = read_scenario(kScenario);
    CHECK(small.detectors.size() == 3);
    CHECK(small.layouts.size() == 2);
    CHECK(small.exposures.size() == 4);
    CHECK(small.exposures[3].camera_angle_deg == -123.0);
    CHECK(small.exposures[3].transparency == 0.9);
    CHECK(small.exposures[0].kind == simulate::ExposureKind::dark);
    // FITS pixel (128, 96) is (127, 95) here.
    CHECK(small.layouts[small.detectors[0].layout].channels[3].node_x == 127);
    CHECK(small.layouts[small.detectors[0].layout].channels[3].node_y == 95);
    CHECK(read_bright_stars(small.fields[0].stars).size() == 6);

    const simulate::Scenario demo =
        read_scenario(std::string(STRAYMARK_SOURCE) + "/demo_data/petrel_night.yaml");
    CHECK(demo.detectors.size() == 4);
    for (const simulate::FieldPlan& field : demo.fields) {
        CHECK(read_bright_stars(field.stars).size() > 400);
    }
}

TEST_CASE("what cannot be simulated is refused with its place") {
    struct Case {
        const char *from, *to, *said;
    };
    const Case damage = GENERATE(
        Case{"seed: 7", "seeds: 7", "seed"}, Case{"seed: 7", "seed: seven", "seed"},
        Case{"mirrored: true", "mirrored: true\n  mirrored: false", "mirrored"},
        Case{"focal_length_mm: 8280", "focal_length_mm: 8.28", "focal_length_mm"},
        Case{"pixel_response: 0.003", "pixel_response: .nan", "pixel_response"},
        Case{"gain_e_per_adu: [1.4, 2.2]", "gain_e_per_adu: [2.2, 1.4]", "low at most high"},
        Case{"id: a2, node: [128, 1], serial: [-1, 0]", "id: a2, node: [128, 1], serial: [1, 0]",
             "inside 128 x 96"},
        Case{"id: a2, node", "id: a1, node", "a second time"},
        Case{"id: a1, node: [1, 1], serial: [1, 0], parallel: [0, 1]",
             "id: a1, node: [1, 1], serial: [1, 0], parallel: [1, 0]", "right angles"},
        Case{"rows_towards: [-0.6, 0.8]", "rows_towards: [0.6, 0.8]", "right angles"},
        Case{"rows_towards: [-0.6, 0.8]", "rows_towards: [-6, 8]", "rows_towards"},
        Case{"prescan: 7", "prescan: 6", "84 ticks and 48 rows"},
        Case{"{id: n2, layout: inward", "{id: n2, layout: onward", "layouts"},
        Case{"{id: n2,", "{id: n1,", "a second time"},
        Case{"id: flat, kind: flat", "id: flat, kind: twilight", "kind"},
        Case{"kind: flat, mjd: 61426.11", "kind: flat, mjd: 61426.09", "order of time"},
        Case{"{id: focus,", "{id: flat,", "a second time"},
        Case{"{id: focus,", "{id: ../focus,", "a file's"},
        Case{"id: dark, kind: dark, mjd: 61426.10, exposure_s: 30, filter: r}",
             "id: dark, kind: dark, mjd: 61426.10, exposure_s: 30, filter: z}", "filters"},
        Case{"field: plane, offset_arcsec: [3, -2]", "field: pole, offset_arcsec: [3, -2]",
             "fields"},
        Case{"faintest_simulated: 20.0", "faintest_simulated: 40.0", "stars in a field"},
        Case{"delay: {fraction: 0.3, longest_ticks: 2}", "delay: {fraction: 0.3}", "longest_ticks"},
        Case{"straymark-scenario/1", "straymark-scenario/2", "straymark-scenario"});
    const std::string said = message(damage.from, damage.to);
    INFO(damage.to << " -> " << said);
    CHECK(said.find(damage.said) != std::string::npos);
    CHECK(said.find("scenario.yaml: line ") != std::string::npos);
}

TEST_CASE("a list of bright stars without a column, or with a pole beyond the pole, is refused") {
    const TemporaryFolder folder;
    CHECK_THROWS_AS(read_bright_stars(folder.write("a.csv", "ra_deg,dec_deg\n1,2\n")), InputError);
    CHECK_THROWS_AS(read_bright_stars(folder.write("b.csv", "ra_deg,dec_deg,vt_mag\n1,92,3\n")),
                    InputError);
    CHECK_THROWS_AS(read_bright_stars(folder.file("missing.csv")), InputError);
}
