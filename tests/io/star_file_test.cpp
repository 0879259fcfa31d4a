#include "io/star_file.h"

#include <catch2/catch.hpp>
#include <cerrno>
#include <limits>
#include <numeric>
#include <thread>

#include "core/error.h"
#include "star_list_support.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::test;

namespace {

constexpr double kAll = std::numeric_limits<double>::infinity();

std::vector<std::string> ids_of(const std::vector<Star>& stars) {
    std::vector<std::string> out;
    for (const Star& star : stars) {
        out.push_back(star.id);
    }
    return out;
}

/// The query by trying every star.
std::vector<std::string> brute_force(const std::vector<RowOfStar>& stars, SkyPoint centre,
                                     double radius_deg, double faintest) {
    std::vector<RowOfStar> found;
    for (const RowOfStar& star : stars) {
        if (separation_deg(centre, star.position) <= radius_deg &&
            (std::isinf(faintest) ||
             static_cast<double>(static_cast<float>(star.mag)) < faintest)) {
            found.push_back(star);
        }
    }
    std::sort(found.begin(), found.end(), [](const RowOfStar& a, const RowOfStar& b) {
        return std::tuple(a.mag, a.position.ra_deg) < std::tuple(b.mag, b.position.ra_deg);
    });
    std::vector<std::string> out;
    for (const RowOfStar& star : found) {
        out.push_back(star.id);
    }
    return out;
}

const std::vector<SkyPoint> kCentres{{10.0, 0.0},   {0.0, 30.0},   {359.9, -60.0}, {45.0, 89.5},
                                     {200.0, 90.0}, {1.0, -89.99}, {180.0, -45.0}};

}  // namespace

TEST_CASE("A query returns the stars of its disc, brightest first, at RA 0 and the poles too") {
    const TemporaryFolder folder;
    const auto stars = random_stars(20000, 1);
    import_stars(folder.write("stars.csv", csv_of(stars)), folder.file("list.fits"));
    const auto list = io::open_star_list(folder.file("list.fits"));
    CHECK(list->size() == 20000);
    for (const SkyPoint& centre : kCentres) {
        for (const double radius_deg : {0.2, 1.5, 20.0}) {
            for (const double faintest : {kAll, 12.0}) {
                CHECK(ids_of(list->within(centre, radius_deg, "r", faintest)) ==
                      brute_force(stars, centre, radius_deg, faintest));
            }
        }
    }
    CHECK(list->within({10.0, 0.0}, 180.0, "r", kAll).size() == stars.size());
}

TEST_CASE("The list's bytes depend on its stars alone, not on their order nor on memory") {
    const TemporaryFolder folder;
    auto stars = random_stars(5000, 2);
    import_stars(folder.write("a.csv", csv_of(stars)), folder.file("a.fits"));
    std::shuffle(stars.begin(), stars.end(), std::mt19937(3));
    io::StarImportSettings small;
    small.batch_bytes = 4096;  // some 100 stars: more than 50 batches are merged
    import_stars(folder.write("b.csv", csv_of(stars)), folder.file("b.fits"), small);
    const bool same = contents(folder.file("a.fits")) == contents(folder.file("b.fits"));
    CHECK(same);
    CHECK(io::open_star_list(folder.file("a.fits"))->digest() ==
          io::open_star_list(folder.file("b.fits"))->digest());
    CHECK(folder.entries() == 4);  // no temporary file is left
    stars.front().mag += 0.001;
    import_stars(folder.write("b.csv", csv_of(stars)), folder.file("b.fits"));
    CHECK(io::open_star_list(folder.file("a.fits"))->digest() !=
          io::open_star_list(folder.file("b.fits"))->digest());
}

TEST_CASE("A filter takes its own column, else the common one, else no magnitude") {
    const TemporaryFolder folder;
    import_stars(folder.write("s.csv",
                              "id,ra,dec,mag,mag_r,mag_R\n"
                              "a,10,10,5,6,7\n"
                              "b,10.01,10,4,,nan\n"),
                 folder.file("l.fits"));
    const auto list = io::open_star_list(folder.file("l.fits"));
    CHECK(list->within({10.0, 10.0}, 1.0, "R", kAll)[0].mag == 7.0);
    CHECK(list->within({10.0, 10.0}, 1.0, "g", kAll)[0].mag == 4.0);
    const auto r = list->within({10.0, 10.0}, 1.0, "r", kAll);
    REQUIRE(r.size() == 2);
    CHECK(r[0].id == "a");
    CHECK(r[0].mag == 6.0);
    CHECK(std::isnan(r[1].mag));
    // A star without a magnitude is no candidate where only bright ones are asked for.
    CHECK(list->within({10.0, 10.0}, 1.0, "r", 30.0).size() == 1);
}

TEST_CASE("Epoch and proper motion come back as they were listed") {
    const TemporaryFolder folder;
    import_stars(folder.write("s.csv",
                              "id,ra,dec,mag,epoch,pmra,pmdec\n"
                              "Barnard's star,269.45,4.67,9.5,1991.25,-797.84,10326.93\n"
                              "still,10,10,5,2016.0,,\n"),
                 folder.file("l.fits"));
    const auto list = io::open_star_list(folder.file("l.fits"));
    const Star star = list->within({269.45, 4.67}, 0.1, "", kAll).at(0);
    CHECK(star.id == "Barnard's star");
    CHECK(star.epoch == 1991.25);
    // Kept in four bytes: 6e-8 of the value.
    CHECK(star.pm_ra_mas_yr == Approx(-797.84).epsilon(1e-7));
    CHECK(star.pm_dec_mas_yr == Approx(10326.93).epsilon(1e-7));
    CHECK(list->within({10.0, 10.0}, 0.1, "", kAll).at(0).pm_dec_mas_yr == 0.0);
}

TEST_CASE("Declared discs are what a list covers") {
    const TemporaryFolder folder;
    io::StarImportSettings settings;
    settings.covers = {{{10.0, 0.0}, 1.0}, {{359.5, 0.0}, 0.5}};
    import_stars(folder.write("s.csv", "id,ra,dec,mag\na,10,0,5\n"), folder.file("l.fits"),
                 settings);
    const auto list = io::open_star_list(folder.file("l.fits"));
    CHECK(list->coverage({10.0, 0.0}, 0.99) == 1.0);
    CHECK(list->coverage({359.5, 0.0}, 0.4) == 1.0);
    CHECK(list->coverage({100.0, 0.0}, 1.0) == 0.0);
    // A disc of twice the radius has four times the area; one centred on the rim of a small cap is
    // covered to 39 per cent (two equal circles through each other's centre).
    CHECK(list->coverage({10.0, 0.0}, 2.0) == Approx(0.25).margin(0.01));
    CHECK(list->coverage({11.0, 0.0}, 1.0) == Approx(0.391).margin(0.01));
}

TEST_CASE("Coverage is found from the stars where it was not declared") {
    const TemporaryFolder folder;
    std::mt19937 random(4);
    std::uniform_real_distribution<double> unit(-1.0, 1.0);
    std::vector<RowOfStar> stars;
    // 60 stars a square degree, over 6 by 6 degrees about (84, 28).
    for (int i = 0; i < 60 * 36; ++i) {
        const double dec = 28.0 + 3.0 * unit(random);
        stars.push_back({fmt::format("{}", i),
                         {84.0 + 3.0 * unit(random) / std::cos(dec * M_PI / 180.0), dec},
                         10.0});
    }
    const auto report = import_stars(folder.write("s.csv", csv_of(stars)), folder.file("l.fits"));
    const auto list = io::open_star_list(folder.file("l.fits"));
    CHECK(list->coverage({84.0, 28.0}, 2.5) == 1.0);
    CHECK(list->coverage({94.0, 28.0}, 1.0) == 0.0);
    // At the edge of the square half a disc is covered, uncertain by a cell.
    const double edge = list->coverage({84.0, 31.0}, 2.0);
    CHECK(edge > 0.5 - report.coverage.cell_size_deg / 2.0);
    CHECK(edge < 0.5 + report.coverage.cell_size_deg / 2.0);
    CHECK(report.coverage.cell_size_deg < 1.3);
}

TEST_CASE("A list with too few stars to show its extent covers nothing") {
    const TemporaryFolder folder;
    const auto report = import_stars(folder.write("s.csv", "id,ra,dec,mag\na,10,0,5\nb,12,3,5\n"),
                                     folder.file("l.fits"));
    CHECK(report.coverage.cells.empty());
    CHECK(io::open_star_list(folder.file("l.fits"))->coverage({10.0, 0.0}, 0.1) == 0.0);
}

TEST_CASE("Damaged, cut and foreign files are refused with the reason") {
    const TemporaryFolder folder;
    import_stars(folder.write("s.csv", csv_of(random_stars(2000, 5))), folder.file("l.fits"));
    const std::string good = contents(folder.file("l.fits"));
    CHECK_NOTHROW(io::verify_star_list(folder.file("l.fits")));
    for (const std::size_t length : {std::size_t{0}, std::size_t{100}, std::size_t{2880},
                                     good.size() / 2, good.size() - 2880}) {
        const std::string cut = folder.write("cut.fits", good.substr(0, length));
        CHECK_THROWS_AS(io::open_star_list(cut), InputError);
    }
    CHECK_THROWS_WITH(io::open_star_list(folder.write(
                          "f.fits", with(good, "straymark-stars/1", "straymark-stars/9"))),
                      Catch::Contains("straymark-stars/9") && Catch::Contains("stars import"));
    CHECK_THROWS_AS(io::open_star_list(folder.file("s.csv")), InputError);
    CHECK_THROWS_AS(io::open_star_list(folder.file("none.fits")), InputError);
    // One bit of one star: opening does not read the stars, verifying does.
    std::string flipped = good;
    flipped[2880 * 3 + 1000] = static_cast<char>(flipped[2880 * 3 + 1000] ^ 1);
    folder.write("flipped.fits", flipped);
    CHECK_THROWS_WITH(io::verify_star_list(folder.file("flipped.fits")),
                      Catch::Contains("found content xxh128:"));
}

TEST_CASE("A thousand mutilated lists are read or refused, and never crash") {
    const TemporaryFolder folder;
    import_stars(folder.write("s.csv", csv_of(random_stars(50, 6))), folder.file("l.fits"));
    const std::string good = contents(folder.file("l.fits"));
    std::mt19937 random(7);
    for (int trial = 0; trial < 1000; ++trial) {
        std::string bad = good;
        for (int i = 0; i < 5; ++i) {
            bad[random() % bad.size()] = static_cast<char>(random() % 256);
        }
        const std::string path = folder.write("bad.fits", bad);
        try {
            const auto list = io::open_star_list(path);
            static_cast<void>(list->within({0.0, 0.0}, 180.0, "r", kAll));
            static_cast<void>(list->coverage({0.0, 0.0}, 5.0));
        } catch (const InputError&) {
        }
        CHECK_THROWS_AS(io::verify_star_list(path), InputError);
    }
}

TEST_CASE("Several threads may ask one list at once") {
    const TemporaryFolder folder;
    import_stars(folder.write("s.csv", csv_of(random_stars(5000, 8))), folder.file("l.fits"));
    const auto list = io::open_star_list(folder.file("l.fits"));
    const auto expected = ids_of(list->within({0.0, 30.0}, 20.0, "r", kAll));
    std::array<bool, 4> same{};
    std::vector<std::thread> threads;
    for (bool& result : same) {
        threads.emplace_back([&] {
            result = true;
            for (int i = 0; i < 50; ++i) {
                result = result && ids_of(list->within({0.0, 30.0}, 20.0, "r", kAll)) == expected;
            }
        });
    }
    for (std::thread& thread : threads) {
        thread.join();
    }
    CHECK(same == std::array<bool, 4>{true, true, true, true});
}

TEST_CASE("A disk that is full at any moment leaves no list and no temporary file") {
    const TemporaryFolder folder;
    const std::string source = folder.write("s.csv", csv_of(random_stars(1000, 9)));
    io::StarImportSettings settings;
    settings.batch_bytes = 8192;
    bool succeeded = false;
    int failures = 0;
    for (int n = 0; !succeeded; ++n) {
        int operations = 0;
        io::set_file_fault([&operations, n](io::FileOperation, const std::string&) {
            return operations++ == n ? ENOSPC : 0;
        });
        try {
            import_stars(source, folder.file("l.fits"), settings);
            succeeded = true;
        } catch (const SystemError& error) {
            CHECK(error.error_number() == ENOSPC);
            CHECK(folder.entries() == 1);
            ++failures;
        }
        io::set_file_fault(nullptr);
    }
    CHECK(failures > 5);
    CHECK(folder.entries() == 2);
}
