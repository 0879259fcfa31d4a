#include "io/score_input.h"

#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>

#include "core/error.h"
#include "io/mask_fixture.h"
#include "io/outside_fits.h"

namespace straymark {
namespace {

constexpr int kWidth = 20;
constexpr int kHeight = 12;

/// What to do to a truth file before it is closed; the defaults make a good one.
struct TruthPlan {
    std::string format = "straymark-truth/1";
    std::vector<int> x2{10, 20};  ///< of the two amplifiers
    double noise = 8.0;
    std::vector<float> psf{0, 0.125F, 0, 0.125F, 0.5F, 0.125F, 0, 0.125F, 0};
    float pixel = 1.5F;
};

void write_truth(const std::string& path, const TruthPlan& plan = {}) {
    test::OutsideFits file(path);
    file.text_key("OBS_ID", "petrel-0001");
    file.text_key("FORMAT", plan.format);
    std::vector<float> signal(kWidth * kHeight, 0.0F);
    signal[3 * kWidth + 4] = plan.pixel;
    file.image("d1.crosstalk", kWidth, kHeight, signal);
    file.image("d1.psf", 3, 3, plan.psf);
    file.table("AMPLIFIERS");
    file.column("detector", std::vector<std::string>{"d1", "d1"});
    file.column("amplifier", std::vector<std::string>{"a01", "a02"});
    file.column("x1", std::vector<int>{1, 11});
    file.column("x2", plan.x2);
    file.column("y1", std::vector<int>{1, 1});
    file.column("y2", std::vector<int>{kHeight, kHeight});
    file.column("gain", std::vector<double>{1.5, 2.5});
    file.column("noise_e", std::vector<double>{plan.noise, 9.0});
    file.column("bias_adu", std::vector<double>{1000.0, 1000.0});
    file.table("ECHOES");
    file.column("victim", std::vector<std::string>{"d1/a01"});
    file.column("source", std::vector<std::string>{"d1/a02"});
    file.column("x", std::vector<double>{5.0});
    file.column("y", std::vector<double>{4.0});
    file.column("source_x", std::vector<double>{15.0});
    file.column("source_y", std::vector<double>{4.0});
    file.column("total_e", std::vector<double>{-30.0});
    file.column("peak_e", std::vector<double>{-6.0});
}

struct MaskPlan {
    std::string exposure = "petrel-0001";
    std::string detector = "d1";
    int width = kWidth;
    int background_px = 0;
};

void write_mask(const std::string& path, const MaskPlan& plan = {}) {
    std::filesystem::create_directories(std::filesystem::path(path).parent_path());
    test::OutsideFits file(path);
    file.text_key("OBS_ID", plan.exposure);
    std::vector<std::int16_t> bits(static_cast<std::size_t>(plan.width) * kHeight, 0);
    bits[3 * static_cast<std::size_t>(plan.width) + 4] = 8;
    file.image(plan.detector, plan.width, kHeight, bits);
    file.table("BITS");
    file.column("name", std::vector<std::string>{"crosstalk_positive", "crosstalk_negative",
                                                 "crosstalk_unassessed", "marginal", "saturated",
                                                 "bleed", "defect", "ghost"});
    file.column("value", std::vector<int>{4, 8, 512, 256, 1, 2, 128, 16});
    // Three rows: an echo, a ghost, a sum of faint echoes.
    file.table("MARKS");
    file.column("kind", std::vector<std::string>{"crosstalk", "ghost", "crosstalk"});
    file.column("detector", std::vector<std::string>(3, plan.detector));
    file.column("source", std::vector<std::string>{"d1/a02", "star 7", ""});
    for (const char* name : {"cause", "shape", "calibration"}) {
        file.column(name, std::vector<std::string>(3, "x"));
    }
    file.column("status", std::vector<std::string>(3, "measured"));
    for (const char* name :
         {"source_x", "source_y", "response", "response_error", "significance"}) {
        file.column(name, std::vector<double>(3, 1.0));
    }
    file.column("x", std::vector<double>(3, 5.0));
    file.column("y", std::vector<double>(3, 4.0));
    file.column("x1", std::vector<int>(3, 4));
    file.column("x2", std::vector<int>(3, 6));
    file.column("y1", std::vector<int>(3, 3));
    file.column("y2", std::vector<int>(3, 5));
    file.column("strength_e", std::vector<double>(3, -31.0));
    file.column("error_e", std::vector<double>(3, 0.5));
    file.column("peak_e", std::vector<double>(3, -6.2));
    file.column("area_px", std::vector<int>(3, 1));
    file.column("count", std::vector<int>{1, 1, 250});
    file.table("DETECTION");
    file.column("detector", std::vector<std::string>(2, plan.detector));
    file.column("amplifier", std::vector<std::string>{"a01", "a02"});
    file.column("state", std::vector<std::string>{"ok", "dead"});
    for (const char* name : {"reason", "psf_source"}) {
        file.column(name, std::vector<std::string>(2, ""));
    }
    for (const char* name : {"sky_e", "fwhm_px", "noise_equivalent_area_px", "floor_e"}) {
        file.column(name, std::vector<double>(2, 1.0));
    }
    file.column("noise_e", std::vector<double>(2, 8.1));
    file.column("gain", std::vector<double>(2, 1.6));
    file.column("psf_stars", std::vector<int>(2, 3));
    file.column("background_px", std::vector<int>(2, plan.background_px));
}

TEST_CASE("A truth file gives detectors, amplifiers and echoes, pixels from 0") {
    const test::ScratchFolder folder;
    write_truth(folder.file("petrel-0001.truth.fits"));
    const io::TruthFile truth(folder.file("petrel-0001.truth.fits"));
    CHECK(truth.exposure() == "petrel-0001");
    REQUIRE(truth.detectors() == std::vector<std::string>{"d1"});
    const score::TrueDetector d1 = truth.detector("d1", "crosstalk");
    CHECK(d1.width == kWidth);
    CHECK(d1.height == kHeight);
    CHECK(d1.signal_e[3 * kWidth + 4] == 1.5F);
    CHECK(d1.psf.radius == 1);
    CHECK(d1.psf.values[4] == 0.5F);
    REQUIRE(d1.amplifiers.size() == 2);
    CHECK(d1.amplifiers[1].name == "d1/a02");
    CHECK(d1.amplifiers[1].section == PixelBox{10, 0, 20, 12});
    CHECK(d1.amplifiers[1].gain_e_per_adu == 2.5);
    CHECK(d1.amplifiers[1].noise_e == 9.0);
    REQUIRE(d1.echoes.size() == 1);
    CHECK(d1.echoes[0].victim == "d1/a01");
    CHECK(d1.echoes[0].source == "d1/a02");
    CHECK(d1.echoes[0].x_px == 4.0);
    CHECK(d1.echoes[0].y_px == 3.0);
    CHECK(d1.echoes[0].total_e == -30.0);
    CHECK(d1.echoes[0].peak_e == -6.0);
    CHECK_THROWS_AS(truth.detector("d1", "ghost"), InputError);
    CHECK_THROWS_AS(truth.detector("d2", "crosstalk"), InputError);
}

TEST_CASE("A truth file that contradicts itself is refused") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("x.truth.fits");
    const auto read = [&path] { (void)io::TruthFile(path).detector("d1", "crosstalk"); };
    TruthPlan plan;
    SECTION("another format") {
        plan.format = "straymark-truth/2";
    }
    SECTION("sections that overlap") {
        plan.x2 = {11, 20};
    }
    SECTION("sections that leave a gap") {
        plan.x2 = {9, 20};
    }
    SECTION("sections beyond the detector") {
        plan.x2 = {10, 21};
    }
    SECTION("a section far away") {
        plan.x2 = {10, 2000000000};
    }
    SECTION("no noise") {
        plan.noise = 0.0;
    }
    SECTION("a point-spread function that does not sum to 1") {
        plan.psf[4] = 0.4F;
    }
    SECTION("a point-spread function below zero") {
        plan.psf[0] = -0.01F, plan.psf[4] = 0.51F;
    }
    SECTION("a pixel that is not a number") {
        plan.pixel = std::nanf("");
    }
    write_truth(path, plan);
    CHECK_THROWS_AS(read(), InputError);
}

TEST_CASE("Truth files are found in the folder or in its truth folder") {
    const test::ScratchFolder folder;
    CHECK_THROWS_AS(io::truth_files_in(folder.path()), InputError);
    CHECK_THROWS_AS(io::truth_files_in(folder.file("missing")), InputError);
    std::filesystem::create_directory(folder.file("truth"));
    for (const char* name : {"truth/b.truth.fits", "truth/a.truth.fits", "truth/other.fits"}) {
        std::ofstream(folder.file(name)) << "x";
    }
    CHECK(io::truth_files_in(folder.path()) ==
          std::vector<std::string>{folder.file("truth/a.truth.fits"),
                                   folder.file("truth/b.truth.fits")});
    CHECK(io::truth_files_in(folder.file("truth")).size() == 2);
}

TEST_CASE("A mask is made ready: bits by name, single marks of the kind, amplifiers") {
    const test::ScratchFolder folder;
    write_truth(folder.file("t.truth.fits"));
    write_mask(folder.file("masks/n1.mask.fits"));
    const io::TruthFile truth(folder.file("t.truth.fits"));
    const io::MaskIndex index = io::index_masks(folder.file("masks"));
    CHECK(index.faults.empty());
    const io::ExposureMasks masks(index.paths.at("petrel-0001"), truth, "crosstalk", 0);
    const score::FoundDetector d1 = masks.detector("d1");
    CHECK(d1.present);
    CHECK(d1.values.positive == 4);
    CHECK(d1.values.negative == 8);
    CHECK(d1.values.unassessed == 512);
    CHECK(d1.values.marginal == 256);
    CHECK(d1.values.saturated == 1);
    CHECK(d1.values.bleed == 2);
    CHECK(d1.values.defect == 128);
    CHECK(d1.bits[3 * kWidth + 4] == 8);
    REQUIRE(d1.marks.size() == 1);  // neither the ghost nor the sum of faint echoes
    CHECK(d1.marks[0].source == "d1/a02");
    CHECK(d1.marks[0].measured);
    CHECK(d1.marks[0].x_px == 4.0);
    CHECK(d1.marks[0].y_px == 3.0);
    CHECK(d1.marks[0].box == PixelBox{3, 2, 6, 5});
    CHECK(d1.marks[0].peak_e == -6.2);
    CHECK(d1.marks[0].error_e == Approx(6.2 * 0.5 / 31.0));  // of the whole, in proportion
    REQUIRE(d1.amplifiers.size() == 2);
    CHECK(d1.amplifiers[0].name == "d1/a01");
    CHECK(d1.amplifiers[0].usable);
    CHECK_FALSE(d1.amplifiers[1].usable);
    CHECK(d1.amplifiers[0].gain_e_per_adu == 1.6);
    CHECK(d1.amplifiers[0].noise_e == 8.1);
    CHECK_FALSE(masks.detector("d2").present);

    const io::ExposureMasks none({}, truth, "crosstalk", 0);
    CHECK_FALSE(none.detector("d1").present);
}

TEST_CASE("Masks that do not belong to the truth are refused") {
    const test::ScratchFolder folder;
    write_truth(folder.file("t.truth.fits"));
    const io::TruthFile truth(folder.file("t.truth.fits"));
    const std::string path = folder.file("masks/n1.mask.fits");
    const auto use = [&](const std::vector<std::string>& paths, int background_px = 0) {
        const io::ExposureMasks masks(paths, truth, "crosstalk", background_px);
    };
    SECTION("a detector of another name") {
        write_mask(path, {"petrel-0001", "x1"});
        CHECK_THROWS_WITH(use({path}), Catch::Contains("another camera"));
    }
    SECTION("a detector of another size") {
        write_mask(path, {"petrel-0001", "d1", kWidth + 1});
        CHECK_THROWS_WITH(use({path}), Catch::Contains("another camera"));
    }
    SECTION("a detector in two files") {
        write_mask(path);
        write_mask(folder.file("masks/n2.mask.fits"));
        CHECK_THROWS_WITH(use({path, folder.file("masks/n2.mask.fits")}), Catch::Contains("d1"));
    }
    SECTION("another background subtraction") {
        write_mask(path, {"petrel-0001", "d1", kWidth, 64});
        CHECK_THROWS_WITH(use({path}), Catch::Contains("--background-px 64"));
        CHECK_NOTHROW(use({path}, 64));
    }
}

TEST_CASE("A mask that cannot be read is told apart from one that is not there") {
    const test::ScratchFolder folder;
    CHECK_THROWS_AS(io::index_masks(folder.file("missing")), InputError);
    write_mask(folder.file("masks/n1.mask.fits"));
    std::ofstream(folder.file("masks/n2.mask.fits")) << "SIMPLE  = nonsense";
    std::ofstream(folder.file("masks/notes.txt")) << "not looked at";
    const io::MaskIndex index = io::index_masks(folder.file("masks"));
    CHECK(index.paths.size() == 1);
    REQUIRE(index.faults.size() == 1);
    CHECK(index.faults.front().find("n2.mask.fits") != std::string::npos);
}

}  // namespace
}  // namespace straymark
