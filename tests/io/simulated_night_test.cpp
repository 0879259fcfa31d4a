#include "io/simulated_night.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <filesystem>
#include <map>
#include <string>
#include <vector>

#include "artifacts/crosstalk/params.h"
#include "camera/geometry.h"
#include "io/camera_file.h"
#include "io/files.h"
#include "io/product_file.h"
#include "io/raw_reader.h"
#include "io/scenario_file.h"
#include "io/site_file.h"
#include "io/truth_file.h"
#include "simulate/characterise.h"
#include "simulate/exposure.h"
#include "sky/projection.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::io;
using straymark::test::contents;
using straymark::test::TemporaryFolder;

namespace {

const std::string kScenario = std::string(STRAYMARK_TEST_DATA) + "/scenarios/small.yaml";

/// The small night, made once for all cases.
class Night {
public:
    Night() : scenario(read_scenario(kScenario)) {
        summary = simulate_night(scenario, folder.file("night"), 2, [](int) {});
    }
    [[nodiscard]] std::string file(const std::string& name) const {
        return folder.file("night/" + name);
    }
    TemporaryFolder folder;
    simulate::Scenario scenario;
    NightSummary summary;
};

const Night& night() {
    static const Night made;
    return made;
}

std::map<std::string, std::string> all_files(const std::string& folder) {
    std::map<std::string, std::string> files;
    for (const auto& entry : std::filesystem::recursive_directory_iterator(folder)) {
        if (entry.is_regular_file()) {
            files[std::filesystem::relative(entry.path(), folder).string()] =
                contents(entry.path().string());
        }
    }
    return files;
}

}  // namespace

TEST_CASE("the files of a simulated night are those promised") {
    const std::map<std::string, std::string> files = all_files(night().file(""));
    std::vector<std::string> names;
    for (const auto& [name, text] : files) {
        names.push_back(name);
    }
    CHECK(names == std::vector<std::string>{
                       "calib/crosstalk.fits", "calib_priors_only/crosstalk.fits", "raw/dark.fits",
                       "raw/flat.fits", "raw/focus.fits", "raw/sky.fits", "site.yaml", "small.yaml",
                       "small_amplifiers.csv", "small_pairs.csv", "stars.csv",
                       "truth/sky.truth.fits"});
    CHECK(night().summary.exposures == 4);
    CHECK(night().summary.truths == 1);
    CHECK(night().summary.echoes > 0);
}

TEST_CASE("the same scenario gives the same bytes with one thread and with two") {
    const TemporaryFolder folder;
    simulate_night(night().scenario, folder.file("again"), 1, [](int) {});
    CHECK(all_files(folder.file("again")) == all_files(night().file("")));
}

TEST_CASE("the camera file says what the simulator's own geometry does") {
    const Camera camera = load_camera(night().file("small.yaml"));
    const simulate::Instrument instrument = simulate::build_instrument(night().scenario);
    constexpr double kRounding_mm = 1e-9;
    REQUIRE(camera.detectors.size() == instrument.chips.size());
    int channel_index = 0;
    for (std::size_t d = 0; d < camera.detectors.size(); ++d) {
        const Detector& detector = camera.detectors[d];
        const simulate::Chip& chip = instrument.chips[d];
        CHECK(detector.id == chip.id);
        for (const simulate::Vec2 pixel : {simulate::Vec2{0, 0}, {120.25, 7}, {3, 90.5}}) {
            const FocalPoint place =
                focal_from_detector(camera.focal_plane, detector, {pixel.x, pixel.y});
            const simulate::Vec2 own = chip.focal(pixel);
            CHECK(place.x_mm == Approx(own.x).margin(kRounding_mm));
            CHECK(place.y_mm == Approx(own.y).margin(kRounding_mm));
        }
        for (const Amplifier& amplifier : detector.amplifiers) {
            const simulate::Channel& channel = instrument.channels[channel_index++];
            CHECK(chip.id + "/" + amplifier.id == channel.name);
            CHECK(amplifier.gain_e_per_adu == Approx(channel.gain_e_per_adu).epsilon(1e-6));
            for (const auto& [tick, row] :
                 {std::pair{0, 0}, {63, 0}, {0, 47}, {17, 30}, {63, 47}}) {
                const DetectorPixel pixel =
                    amplifier.readout.detector_from_readout({tick + channel.prescan, row});
                CHECK(pixel.y * chip.width + pixel.x == channel.pixel(tick, row));
            }
        }
    }
}

TEST_CASE("stars fall where projection and camera geometry put them") {
    const Camera camera = load_camera(night().file("small.yaml"));
    for (const double angle : {0.0, 37.0, -123.0}) {
        const simulate::Aim aim(night().scenario.telescope, simulate::direction(84.0, 28.0), angle);
        for (const SkyPoint star : {SkyPoint{84.1, 28.05}, {83.9, 27.8}, {84.3, 28.2}}) {
            const auto tangent = tangent_from_sky({84.0, 28.0}, star);
            REQUIRE(tangent);
            const FocalPoint place =
                focal_from_tangent(camera.telescope, camera.focal_plane, angle, *tangent);
            const auto own = aim.image(simulate::direction(star.ra_deg, star.dec_deg));
            REQUIRE(own);
            constexpr double kRounding_mm = 1e-8;  // of 60 mm, through arc functions near 1
            CHECK(place.x_mm == Approx(own->x).margin(kRounding_mm));
            CHECK(place.y_mm == Approx(own->y).margin(kRounding_mm));
        }
    }
}

TEST_CASE("raw files are read as the camera file says, pixel by pixel") {
    const Camera camera = load_camera(night().file("small.yaml"));
    const auto reader = make_raw_reader(camera);
    const RawFile raw = reader->inspect(night().file("raw/sky.fits"));
    CHECK(raw.header.id == "sky");
    CHECK(raw.header.type == ExposureType::sky);
    CHECK(raw.header.start.days == 61426.18);
    CHECK(raw.header.psi_deg == -123.0);
    CHECK(raw.notes.empty());
    CHECK(raw.detectors == std::vector<int>{0, 1, 2});
    CHECK(reader->inspect(night().file("raw/dark.fits")).header.type == ExposureType::dark);
    CHECK(reader->inspect(night().file("raw/flat.fits")).header.type == ExposureType::flat);
    CHECK(reader->inspect(night().file("raw/focus.fits")).header.type == ExposureType::focus);

    simulate::World world{night().scenario, simulate::build_instrument(night().scenario), {}, {}};
    world.coupling = simulate::draw_coupling(world.scenario, world.instrument);
    world.fields.push_back(
        simulate::make_field(world.scenario, 0, read_bright_stars(world.scenario.fields[0].stars)));
    const simulate::SimulatedExposure exposure = simulate::expose(world, 3, 2);
    int channel_index = 0;
    AmplifierFrame frame;
    for (int d = 0; d < 3; ++d) {
        const auto pixels = reader->open(raw, d);
        for (int a = 0; a < 4; ++a) {
            pixels->read(a, frame);
            const simulate::Channel& channel = world.instrument.channels[channel_index];
            const auto& values = exposure.raw[channel_index++];
            int different = 0;
            for (int j = frame.data.y0; j < frame.data.y1; ++j) {
                for (int i = frame.data.x0; i < frame.data.x1; ++i) {
                    const ReadoutIndex index = frame.readout_from_file(i, j);
                    const float expected = values[index.row * channel.ticks_in_row() + index.tick];
                    different += frame.pixels[j * frame.width + i] == expected ? 0 : 1;
                }
            }
            CHECK(different == 0);
            CHECK(frame.data.width() * frame.data.height() == 64 * 48);
        }
    }
}

TEST_CASE("the truth is read back, and its echoes lie where its image says") {
    const TruthFile truth(night().file("truth/sky.truth.fits"));
    CHECK(truth.exposure() == "sky");
    int strong = 0;
    int agreeing = 0;
    for (const std::string& id : truth.detectors()) {
        const score::TrueDetector detector = truth.detector(id, "crosstalk");
        for (const score::TrueEcho& echo : detector.echoes) {
            const auto x = static_cast<int>(std::lround(echo.x_px));
            const auto y = static_cast<int>(std::lround(echo.y_px));
            const double there = static_cast<double>(detector.signal_e[y * detector.width + x]);
            const score::TrueAmplifier* victim = score::amplifier_at(detector, x, y);
            REQUIRE(victim != nullptr);
            CHECK(victim->name == echo.victim);
            if (std::fabs(echo.peak_e) > 2.0 * victim->noise_e) {
                ++strong;
                agreeing += there * echo.peak_e > 0.0 ? 1 : 0;
            }
        }
    }
    // Echoes of several stars overlap on so small a detector; rarely does the other sign win.
    CHECK(strong > 10);
    CHECK(agreeing >= 0.9 * strong);
}

TEST_CASE("the site and both products are accepted for the camera") {
    const Site site = load_site(night().file("site.yaml"));
    CHECK(site.camera.name == "small");
    const auto known = crosstalk::Params::from_product(
        site.camera, read_product(night().file("calib/crosstalk.fits")));
    const auto unknown = crosstalk::Params::from_product(
        site.camera, read_product(night().file("calib_priors_only/crosstalk.fits")));
    const simulate::Instrument instrument = simulate::build_instrument(night().scenario);
    const simulate::Coupling coupling = simulate::draw_coupling(night().scenario, instrument);
    for (const simulate::Leak& leak : coupling.by_clock[0]) {
        const crosstalk::Pair& pair = known.pair(leak.victim, leak.source);
        CHECK(pair.known());
        const double direct =
            static_cast<double>(leak.resistive) + static_cast<double>(leak.capacitive);
        // Five of its own errors, or a zero below its floor.
        CHECK(std::fabs(static_cast<double>(pair.coefficient) - direct) <
              5.0 * std::max(2e-6, 0.01 * std::fabs(direct)) + 2e-6);
        CHECK(known.offset_ticks(leak.victim, leak.source) == leak.delay_ticks);
        CHECK_FALSE(unknown.pair(leak.victim, leak.source).known());
        CHECK(unknown.pair(leak.victim, leak.source).error > 0.0F);
    }
}
