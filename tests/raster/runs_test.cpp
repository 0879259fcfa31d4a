#include "raster/runs.h"

#include <algorithm>
#include <catch2/catch.hpp>
#include <random>
#include <set>
#include <utility>

#include "raster/components.h"

using namespace straymark;

namespace {

using PixelSet = std::set<std::pair<int, int>>;  // (y, x)

PixelSet pixels_of(const std::vector<PixelRun>& runs) {
    PixelSet pixels;
    for (const PixelRun& run : runs) {
        for (int x = run.x0; x < run.x0 + run.length; ++x) {
            pixels.insert({run.y, x});
        }
    }
    return pixels;
}

/// Random runs, some of them empty, overlapping or touching.
std::vector<PixelRun> random_runs(std::mt19937& engine, int size, int count) {
    std::uniform_int_distribution<int> place(0, size - 1);
    std::uniform_int_distribution<int> length(0, 5);
    std::vector<PixelRun> runs(static_cast<std::size_t>(count));
    std::generate(runs.begin(), runs.end(), [&] {
        return PixelRun{place(engine), place(engine), length(engine)};
    });
    return runs;
}

/// Number of 8-connected components by flood filling the set of pixels.
int flooded_components(PixelSet pixels) {
    int count = 0;
    while (!pixels.empty()) {
        ++count;
        std::vector<std::pair<int, int>> stack{*pixels.begin()};
        pixels.erase(pixels.begin());
        while (!stack.empty()) {
            const auto [y, x] = stack.back();
            stack.pop_back();
            for (int dy = -1; dy <= 1; ++dy) {
                for (int dx = -1; dx <= 1; ++dx) {
                    const auto found = pixels.find({y + dy, x + dx});
                    if (found != pixels.end()) {
                        stack.push_back(*found);
                        pixels.erase(found);
                    }
                }
            }
        }
    }
    return count;
}

}  // namespace

TEST_CASE("normalized runs hold the same pixels, in order, and never touch") {
    std::mt19937 engine(1);
    for (int trial = 0; trial < 50; ++trial) {
        std::vector<PixelRun> runs = random_runs(engine, 20, 40);
        const PixelSet before = pixels_of(runs);
        normalize_runs(runs);
        CHECK(pixels_of(runs) == before);
        for (std::size_t k = 1; k < runs.size(); ++k) {
            const PixelRun& a = runs[k - 1];
            const PixelRun& b = runs[k];
            CHECK((a.y < b.y || (a.y == b.y && a.x0 + a.length < b.x0)));
        }
    }
}

TEST_CASE("dilation holds exactly the pixels within the radius and the bounds") {
    std::mt19937 engine(2);
    const PixelBox bounds{0, 0, 24, 20};
    for (const double radius : {0.0, 1.0, 1.5, 2.9, 4.0}) {
        const std::vector<PixelRun> runs = random_runs(engine, 20, 6);
        PixelSet expected;
        for (int y = bounds.y0; y < bounds.y1; ++y) {
            for (int x = bounds.x0; x < bounds.x1; ++x) {
                for (const auto& [py, px] : pixels_of(runs)) {
                    if ((y - py) * (y - py) + (x - px) * (x - px) <= radius * radius) {
                        expected.insert({y, x});
                    }
                }
            }
        }
        CHECK(pixels_of(dilated(runs, radius, bounds)) == expected);
    }
}

TEST_CASE("components agree with flood filling") {
    std::mt19937 engine(3);
    for (const int count : {1, 10, 40, 80, 150}) {
        for (int trial = 0; trial < 20; ++trial) {
            std::vector<PixelRun> runs = random_runs(engine, 30, count);
            normalize_runs(runs);
            const RunComponents components = connected_components(runs);
            REQUIRE(components.label.size() == runs.size());
            CHECK(components.count == flooded_components(pixels_of(runs)));
            // One label is one blob: so many labels, each connected, are the same partition.
            for (int label = 0; label < components.count; ++label) {
                std::vector<PixelRun> blob;
                for (std::size_t k = 0; k < runs.size(); ++k) {
                    if (components.label[k] == label) {
                        blob.push_back(runs[k]);
                    }
                }
                CHECK(flooded_components(pixels_of(blob)) == 1);
            }
        }
    }
}

TEST_CASE("components join runs that touch only at a corner, and touching runs of one row") {
    const std::vector<PixelRun> corner{{0, 0, 2}, {1, 2, 2}, {2, 4, 1}};
    CHECK(connected_components(corner).count == 1);
    const std::vector<PixelRun> apart{{0, 0, 2}, {1, 3, 2}};
    CHECK(connected_components(apart).count == 2);
    const std::vector<PixelRun> split_row{{0, 0, 2}, {0, 2, 2}};
    CHECK(connected_components(split_row).count == 1);
    const std::vector<PixelRun> far_rows{{0, 0, 5}, {2, 0, 5}};
    CHECK(connected_components(far_rows).count == 2);
    CHECK(connected_components({}).count == 0);
}

TEST_CASE("components of a comb get labels in the order of their first runs") {
    // Teeth joined by the last row, and one pixel apart that comes between them in the list.
    const std::vector<PixelRun> comb{{0, 0, 1}, {0, 3, 1}, {0, 6, 1}, {1, 0, 1},
                                     {1, 6, 1}, {2, 0, 7}, {9, 3, 1}};
    const RunComponents components = connected_components(comb);
    CHECK(components.count == 3);
    CHECK(components.label == std::vector<int>{0, 1, 0, 0, 0, 0, 2});
}
