#include <catch2/catch.hpp>
#include <chrono>
#include <filesystem>
#include <fstream>

#include "core/error.h"
#include "io/calibration_store.h"
#include "io/mask_fixture.h"

namespace straymark {
namespace {

Product product(const std::string& version, double from, double to, const std::string& mode = "",
                const std::string& filter = "", const std::string& camera = "petrel") {
    Product p;
    p.kind = "crosstalk";
    p.camera = camera;
    p.mode = mode;
    p.filter = filter;
    p.version = version;
    p.valid_from.days = from;
    p.valid_to.days = to;
    return p;
}

Camera petrel() {
    Camera camera;
    camera.name = "petrel";
    return camera;
}

ExposureHeader exposure(double start, const std::string& mode = "fast",
                        const std::string& filter = "r") {
    ExposureHeader header;
    header.start.days = start;
    header.mode = mode;
    header.filter = filter;
    return header;
}

/// The version in force, or why there is none: "none", "error: ...".
std::string answer(const io::CalibrationFolder& store, const ExposureHeader& header,
                   const std::string& kind = "crosstalk") {
    try {
        const std::optional<Product> found = store.in_force(kind, petrel(), header);
        return found ? found->version : "none";
    } catch (const InputError& error) {
        return std::string("error: ") + error.what();
    }
}

bool holds(const std::string& text, const std::string& part) {
    return text.find(part) != std::string::npos;
}

}  // namespace

TEST_CASE("The product whose dates hold the start of the exposure is in force") {
    const test::ScratchFolder folder;
    io::write_product(folder.file("a.fits"), product("old", 60000, 60100));
    io::write_product(folder.file("b.fits"), product("new", 60100, 60200));
    const io::CalibrationFolder store(folder.path());
    CHECK(answer(store, exposure(59999.999)) == "none");
    CHECK(answer(store, exposure(60000)) == "old");
    CHECK(answer(store, exposure(60099.999)) == "old");
    CHECK(answer(store, exposure(60100)) == "new");  // the end is exclusive
    CHECK(answer(store, exposure(60200)) == "none");
    CHECK(answer(store, exposure(60000), "ghost") == "none");
    CHECK(store.all("crosstalk").size() == 2);
}

TEST_CASE("Camera, mode and filter choose; a product that names none serves all") {
    const test::ScratchFolder folder;
    io::write_product(folder.file("a.fits"), product("slow", 0, 1e5, "slow"));
    io::write_product(folder.file("b.fits"), product("other", 0, 1e5, "", "", "auk"));
    io::write_product(folder.file("c.fits"), product("green", 0, 1e5, "fast", "g"));
    const io::CalibrationFolder store(folder.path());
    CHECK(answer(store, exposure(60000, "slow", "r")) == "slow");
    CHECK(answer(store, exposure(60000, "fast", "g")) == "green");
    CHECK(answer(store, exposure(60000, "fast", "r")) == "none");
}

TEST_CASE("Two products in force are an error that names both") {
    const test::ScratchFolder folder;
    io::write_product(folder.file("first.fits"), product("1", 60000, 60100));
    io::write_product(folder.file("second.fits"), product("2", 60050, 60200, "fast"));
    const io::CalibrationFolder store(folder.path());
    const std::string text = answer(store, exposure(60060));
    CHECK(holds(text, "error"));
    CHECK(holds(text, "first.fits"));
    CHECK(holds(text, "second.fits"));
    CHECK(answer(store, exposure(60060, "slow")) == "1");
    CHECK(answer(store, exposure(60150)) == "2");
}

TEST_CASE("A file that cannot be read matters where it could be of the kind asked for") {
    const test::ScratchFolder folder;
    io::write_product(folder.file("a.fits"), product("good", 60000, 60100));
    const io::CalibrationFolder store(folder.path());
    SECTION("of unknown kind: always") {
        std::ofstream(folder.file("z.fits")) << "nothing";
        CHECK(holds(answer(store, exposure(60000)), "z.fits"));
        CHECK(holds(answer(store, exposure(60000), "ghost"), "z.fits"));
    }
    SECTION("of another kind: not") {
        std::ofstream(folder.file("z.json")) << R"({"format": "straymark-ghost/1"})";
        CHECK(answer(store, exposure(60000)) == "good");
        CHECK(holds(answer(store, exposure(60000), "ghost"), "z.json"));
    }
    SECTION("hidden and other files: never") {
        std::ofstream(folder.file(".a.fits.1-0.partial")) << "half";
        std::ofstream(folder.file(".hidden.fits")) << "half";
        std::ofstream(folder.file("README.md")) << "text";
        CHECK(answer(store, exposure(60000)) == "good");
    }
    SECTION("no folder at all") {
        const io::CalibrationFolder nowhere(folder.file("missing"));
        CHECK(holds(answer(nowhere, exposure(60000)), "missing"));
    }
}

TEST_CASE("A product that is replaced, added or removed is noticed at the next question") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("a.fits");
    io::write_product(path, product("1", 60000, 60100));
    const io::CalibrationFolder store(folder.path());
    CHECK(answer(store, exposure(60000)) == "1");
    io::write_product(path, product("2", 60000, 60100));
    std::filesystem::last_write_time(
        path, std::filesystem::last_write_time(path) + std::chrono::seconds(1));
    CHECK(answer(store, exposure(60000)) == "2");
    io::write_product(folder.file("b.fits"), product("3", 60200, 60300));
    CHECK(answer(store, exposure(60200)) == "3");
    std::filesystem::remove(path);
    CHECK(answer(store, exposure(60000)) == "none");
}

}  // namespace straymark
