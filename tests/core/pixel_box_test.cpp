#include "core/pixel_box.h"

#include <catch2/catch.hpp>

using namespace straymark;

TEST_CASE("a box holds its lower edges and not its upper ones") {
    const PixelBox box{2, 3, 5, 4};
    CHECK(box.width() == 3);
    CHECK(box.height() == 1);
    CHECK(box.contains(2, 3));
    CHECK(box.contains(4, 3));
    CHECK_FALSE(box.contains(5, 3));
    CHECK_FALSE(box.contains(4, 4));
    CHECK_FALSE(box.contains(1, 3));
    CHECK_FALSE(box.contains(2, 2));
}

TEST_CASE("boxes that only touch share no pixel") {
    const PixelBox left{0, 0, 4, 4};
    CHECK(left.intersected({4, 0, 8, 4}).empty());
    CHECK(left.intersected({0, 4, 4, 8}).empty());
    CHECK_FALSE(left.intersected({3, 3, 8, 8}).empty());
    CHECK(left.intersected({3, 2, 8, 8}) == PixelBox{3, 2, 4, 4});
}

TEST_CASE("the union is the smallest box that holds both, and empty boxes add nothing") {
    const PixelBox a{0, 1, 2, 3};
    CHECK(a.united({5, -2, 6, 0}) == PixelBox{0, -2, 6, 3});
    CHECK(a.united({9, 9, 9, 20}) == a);
    CHECK(PixelBox{}.united(a) == a);
}

TEST_CASE("a grown box is larger on every side, a shrunk one may be empty") {
    CHECK(PixelBox{1, 2, 3, 4}.grown(2) == PixelBox{-1, 0, 5, 6});
    CHECK(PixelBox{1, 2, 3, 4}.grown(-1).empty());
}
