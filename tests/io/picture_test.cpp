#include "io/picture.h"

#include <catch2/catch.hpp>
#include <cerrno>
#include <cstdint>
#include <filesystem>
#include <fstream>
#include <random>
#include <sstream>
#include <vector>

#include "core/error.h"
#include "io/files.h"
#include "io/mask_fixture.h"
#include "io/outside.h"

namespace straymark {
namespace {

std::vector<std::uint8_t> random_pixels(int width, int height) {
    std::mt19937 random(11);
    std::vector<std::uint8_t> rgb(std::size_t{3} * static_cast<std::size_t>(width * height));
    for (std::uint8_t& value : rgb) {
        value = static_cast<std::uint8_t>(random());
    }
    return rgb;
}

TEST_CASE("A picture is a PNG that holds the pixels as given") {
    const test::ScratchFolder folder;
    constexpr int kWidth = 37;
    constexpr int kHeight = 21;
    const std::vector<std::uint8_t> rgb = random_pixels(kWidth, kHeight);
    io::write_png(folder.file("a [1].png"), kWidth, kHeight, rgb);
    std::ofstream(folder.file("rgb"), std::ios::binary)
        .write(reinterpret_cast<const char*>(rgb.data()), static_cast<std::streamsize>(rgb.size()));
    // Decoded by the format's own rules (PNG specification, third edition, sections 5 and 9) in
    // Python's zlib, not by the library that wrote it.
    const test::CommandResult read =
        test::run_script("png_pixels.py", test::quoted(folder.file("a [1].png")) + " 37 21 " +
                                              test::quoted(folder.file("rgb")));
    INFO(read.output);
    CHECK(read.status == 0);
}

TEST_CASE("The same pixels give the same bytes") {
    const test::ScratchFolder folder;
    const std::vector<std::uint8_t> rgb = random_pixels(30, 30);
    const auto bytes = [&](const std::string& name) {
        io::write_png(folder.file(name), 30, 30, rgb);
        std::ifstream file(folder.file(name), std::ios::binary);
        std::ostringstream text;
        text << file.rdbuf();
        return text.str();
    };
    CHECK(bytes("a.png") == bytes("b.png"));
}

TEST_CASE("A picture that cannot be written leaves nothing behind") {
    const test::ScratchFolder folder;
    io::set_file_fault([](io::FileOperation operation, const std::string&) {
        return operation == io::FileOperation::sync ? ENOSPC : 0;
    });
    CHECK_THROWS_AS(io::write_png(folder.file("a.png"), 4, 4, random_pixels(4, 4)), SystemError);
    io::set_file_fault(nullptr);
    CHECK(std::filesystem::is_empty(folder.path()));
}

}  // namespace
}  // namespace straymark
