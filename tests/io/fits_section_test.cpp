#include "io/fits_section.h"

#include <catch2/catch.hpp>

using namespace straymark;
using namespace straymark::io;

// Sections as real headers write them: tests/reference/real_frames and tests/reference/wcs.

TEST_CASE("A section counts from one and includes both ends") {
    const auto section = parse_section("[25:1048,1:4096]");
    REQUIRE(section);
    CHECK(section->box() == PixelBox{24, 0, 1048, 4096});
    CHECK_FALSE(section->reversed_x());
    CHECK_FALSE(section->reversed_y());
}

TEST_CASE("Blanks may stand anywhere between the parts of a section") {
    CHECK(parse_section("[  17: 528,   1: 520]") == FitsSection{17, 528, 1, 520});
    CHECK(parse_section(" [ 1 : 2 , 3 : 4 ] ") == FitsSection{1, 2, 3, 4});
}

TEST_CASE("A range whose first end is larger runs backwards") {
    const auto section = parse_section("[1:1024,4096:1]");
    REQUIRE(section);
    CHECK_FALSE(section->reversed_x());
    CHECK(section->reversed_y());
    CHECK(section->box() == PixelBox{0, 0, 1024, 4096});
}

TEST_CASE("What is not a section of two axes is not read as one") {
    for (const char* text :
         {"", "[]", "[1:2]", "[1:2,3]", "[1:2,3:4", "1:2,3:4", "[1:2,3:4]x", "[0:2,3:4]",
          "[-1:2,3:4]", "[1:2,3:4,5:6]", "[*,*]", "[1.5:2,3:4]", "[1:99999999999,1:2]",
          "[1:2147483648,1:2]", "[1:1000000001,1:2]", "[1 2:3,4:5]"}) {
        INFO(text);
        CHECK_FALSE(parse_section(text));
    }
}

TEST_CASE("A section is written as it is read") {
    for (const char* text : {"[1:1024,4096:1]", "[5:5,7:9]", "[1000000000:1,2:3]"}) {
        CHECK(to_string(*parse_section(text)) == text);
    }
    CHECK(section_text(PixelBox{24, 0, 1048, 4096}) == "[25:1048,1:4096]");
}
