#include "exposure/measure.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <random>
#include <set>

#include "exposure/synthetic.h"

using namespace straymark;
using namespace straymark::test;

namespace {

constexpr int kSide = 512;
constexpr double kSky = 400.0;

struct TrueStar {
    double x = 0.0, y = 0.0, flux = 0.0;
};

/// Stars far from each other and from the quarter borders, flux so that their signal to noise is
/// 50 to 200.
std::vector<TrueStar> isolated_stars(std::uint64_t seed) {
    std::mt19937_64 engine(seed);
    std::uniform_real_distribution<double> uniform;
    std::vector<TrueStar> stars;
    for (int j = 0; j < 8; ++j) {
        for (int i = 0; i < 8; ++i) {
            stars.push_back({64.0 * i + 24.0 + 16.0 * uniform(engine),
                             64.0 * j + 24.0 + 16.0 * uniform(engine),
                             8000.0 * std::pow(8.0, uniform(engine))});
        }
    }
    return stars;
}

Field field_of(const std::vector<TrueStar>& stars, double fwhm = 2.8) {
    Field field(kSide, kSide, kSky);
    for (const TrueStar& star : stars) {
        add_star(field, star.x, star.y, star.flux, fwhm, 3.0, 30);
    }
    return field;
}

/// A bright field with everything in it: faint and saturated stars, a trail.
Field busy_field() {
    Field field = field_of(isolated_stars(3));
    add_star(field, 300.0, 200.0, 2e7, 2.8, 3.0, 120);
    for (int y = 150; y < 260; ++y) {
        field.at(299, y) = field.at(300, y) = 140000.0;
    }
    return field;
}

void check_same(const DetectorDigest& a, const DetectorDigest& b) {
    REQUIRE(a.amplifiers.size() == b.amplifiers.size());
    for (std::size_t k = 0; k < a.amplifiers.size(); ++k) {
        const AmplifierDigest& left = a.amplifiers[k];
        const AmplifierDigest& right = b.amplifiers[k];
        CHECK(left.state == right.state);
        CHECK(left.bias_adu == right.bias_adu);
        CHECK(left.sky_adu == right.sky_adu);
        CHECK(left.noise_adu == right.noise_adu);
        CHECK(left.floor_adu == right.floor_adu);
        CHECK(left.runs == right.runs);
        CHECK(left.values == right.values);
        CHECK(left.saturated == right.saturated);
        CHECK(left.invalid == right.invalid);
    }
    CHECK(a.psf.values == b.psf.values);
    CHECK(a.bleed == b.bleed);
    REQUIRE(a.stars.size() == b.stars.size());
    for (std::size_t k = 0; k < a.stars.size(); ++k) {
        CHECK(a.stars[k].position.x_px == b.stars[k].position.x_px);
        CHECK(a.stars[k].position.y_px == b.stars[k].position.y_px);
        CHECK(a.stars[k].flux_e == b.stars[k].flux_e);
    }
}

const std::vector<Corner> kAllCorners{Corner::lower_left, Corner::lower_right, Corner::upper_left,
                                      Corner::upper_right};

}  // namespace

TEST_CASE("positions and fluxes of stars are those put in, within their errors") {
    const auto serial = GENERATE(SerialAxis::x, SerialAxis::y);
    const Camera camera = make_camera(kSide, kSide, 2, 2, kAllCorners, serial, 6);
    const std::vector<TrueStar> truth = isolated_stars(1);
    MemoryFrame frame(camera, field_of(truth), 2);
    const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 2);
    int matched = 0;
    double position_pulls = 0.0, flux_pulls = 0.0, worst = 0.0;
    for (const MeasuredStar& star : digest.stars) {
        for (const TrueStar& expected : truth) {
            const double dx = star.position.x_px - expected.x;
            const double dy = star.position.y_px - expected.y;
            if (std::hypot(dx, dy) < 1.5) {
                ++matched;
                const double error = star.position_error_px;
                position_pulls += (dx * dx + dy * dy) / (2.0 * error * error);
                const double pull = (star.flux_e - expected.flux) / star.flux_error_e;
                flux_pulls += pull * pull;
                worst = std::max({worst, std::abs(dx), std::abs(dy)});
            }
        }
    }
    CHECK(matched == 64);
    CHECK(digest.stars.size() == 64);
    // 128 squared pulls have a mean of 1 +- 0.125, 64 of 1 +- 0.18; 4 sigmas.
    CHECK(position_pulls / matched == Approx(1.0).margin(0.5));
    CHECK(flux_pulls / matched == Approx(1.0).margin(0.75));
    // At signal to noise 50 sqrt(2) 1.19 / 50 = 0.034 px along each axis; the worst of 128, 3.5
    // sigmas.
    CHECK(worst < 0.12);
    CHECK(std::is_sorted(digest.stars.begin(), digest.stars.end(),
                         [](const auto& a, const auto& b) { return a.flux_e > b.flux_e; }));
}

TEST_CASE("levels, floor and saturation are those put in") {
    const Camera camera = make_camera(kSide, kSide, 2, 2, kAllCorners, SerialAxis::x, 6);
    MemoryFrame frame(camera, busy_field(), 4);
    DigestPolicy policy;
    policy.floor_sigma = 4.0;
    const DetectorDigest digest = measure_detector(camera, 0, frame, policy, 1);
    CHECK(digest.present);
    CHECK(digest.raw_file == "petrel 1.fits");
    for (const AmplifierDigest& amplifier : digest.amplifiers) {
        CHECK(amplifier.state == AmplifierState::ok);
        CHECK(amplifier.bias_adu == Approx(MemoryFrame::kBias).margin(0.5));
        CHECK(amplifier.sky_adu == Approx(kSky / 2.0).margin(3.0));
        CHECK(amplifier.noise_adu == Approx(std::sqrt(436.0) / 2.0).epsilon(0.04));
        CHECK(amplifier.floor_adu == 4.0 * amplifier.noise_adu);
    }
    // Every saturated pixel of the raw data, and no other, in the read-out indices of its
    // amplifier.
    for (int a = 0; a < 4; ++a) {
        std::set<std::pair<int, int>> expected;
        for (int r = 0; r < frame.rows(a); ++r) {
            for (int t = 0; t < kSide / 2; ++t) {
                if (frame.raw(a, t, r) >= 60000.0F) {
                    expected.insert({r, t + 6});
                }
            }
        }
        std::set<std::pair<int, int>> found;
        for (const ReadoutSpan& span : digest.amplifiers[a].saturated) {
            for (int k = 0; k < span.length; ++k) {
                found.insert({span.row, span.tick + k});
            }
        }
        CHECK(found == expected);
    }
}

TEST_CASE("the digest does not depend on how the file stores its pixels") {
    const Camera camera = make_camera(kSide, kSide, 2, 1, {Corner::lower_left, Corner::upper_right},
                                      SerialAxis::x, 5);
    const Field field = busy_field();
    MemoryFrame plain(camera, field, 5);
    plain.raw(0, 100, 100) = NAN;
    const DetectorDigest expected = measure_detector(camera, 0, plain, {}, 1);
    for (const bool transposed : {false, true}) {
        for (const bool flip_columns : {false, true}) {
            for (const bool flip_rows : {false, true}) {
                plain.store(0, {flip_columns, flip_rows, transposed});
                plain.store(1, {flip_rows, !flip_columns, !transposed});
                check_same(measure_detector(camera, 0, plain, {}, 1), expected);
            }
        }
    }
}

TEST_CASE("the digest does not depend on the number of threads") {
    const Camera camera = make_camera(kSide, kSide, 4, 2, kAllCorners);
    MemoryFrame frame(camera, busy_field(), 6);
    const DetectorDigest one = measure_detector(camera, 0, frame, {}, 1);
    check_same(measure_detector(camera, 0, frame, {}, 2), one);
    check_same(measure_detector(camera, 0, frame, {}, 5), one);
}

TEST_CASE("amplifiers that say nothing are recorded with the reason") {
    Camera camera = make_camera(kSide, kSide, 3, 2);
    camera.detectors.front().amplifiers[5].status = AmplifierStatus::dead;
    MemoryFrame frame(camera, field_of(isolated_stars(7)), 7);
    const auto fill = [&frame](int amplifier, float value) {
        for (int r = 0; r < frame.rows(amplifier); ++r) {
            for (int t = 0; t < frame.ticks(amplifier) - 32; ++t) {
                frame.raw(amplifier, t, r) = value;
            }
        }
    };
    fill(0, NAN);
    fill(1, 65535.0F);
    fill(2, 0.0F);
    frame.lose(3);
    const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 1);
    CHECK(digest.present);
    CHECK(digest.amplifiers[0].state == AmplifierState::unusable);
    CHECK_THAT(digest.amplifiers[0].reason, Catch::Contains("no pixel has a value"));
    CHECK(digest.amplifiers[1].state == AmplifierState::unusable);
    CHECK_THAT(digest.amplifiers[1].reason, Catch::Contains("100 % of the pixels are saturated"));
    CHECK(digest.amplifiers[2].state == AmplifierState::unusable);
    CHECK_THAT(digest.amplifiers[2].reason, Catch::Contains("constant"));
    CHECK(digest.amplifiers[3].state == AmplifierState::missing);
    CHECK_THAT(digest.amplifiers[3].reason, Catch::Contains("HDU 3"));
    CHECK(digest.amplifiers[4].state == AmplifierState::ok);
    CHECK(digest.amplifiers[5].state == AmplifierState::dead);
    for (const int a : {0, 1, 2, 3, 5}) {
        CHECK(digest.amplifiers[a].runs.empty());
    }
    CHECK(digest.bleed.empty());
}

TEST_CASE("a detector whose only amplifier cannot be read is not present") {
    const Camera camera = make_camera(64, 64, 1, 1);
    MemoryFrame frame(camera, Field(64, 64, kSky), 8);
    frame.lose(0);
    const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 1);
    CHECK_FALSE(digest.present);
    CHECK_THAT(digest.reason, Catch::Contains("HDU 3"));
}

TEST_CASE("columns without a value are invalid, are in no run, and hold no star") {
    const Camera camera = make_camera(kSide, kSide, 1, 1);
    std::vector<TrueStar> truth = isolated_stars(9);
    MemoryFrame frame(camera, field_of(truth), 9);
    const int column = static_cast<int>(std::lround(truth[20].x));
    for (int r = 0; r < kSide; ++r) {
        frame.raw(0, column, r) = r % 2 == 0 ? NAN : INFINITY;
    }
    const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 1);
    const AmplifierDigest& amplifier = digest.amplifiers.front();
    CHECK(amplifier.invalid.size() == kSide);
    for (const ReadoutRun& run : amplifier.runs) {
        CHECK((column < run.tick || column >= run.tick + run.length));
    }
    for (const MeasuredStar& star : digest.stars) {
        CHECK(std::abs(star.position.x_px - column) > 2.0);
    }
    CHECK(digest.psf.source == PsfSource::measured);
}

TEST_CASE("cosmic rays are not stars") {
    const Camera camera = make_camera(kSide, kSide, 1, 1);
    Field field = field_of(isolated_stars(10), 2.0);
    std::mt19937_64 engine(11);
    std::uniform_int_distribution<int> place(10, kSide - 10);
    for (int k = 0; k < 150; ++k) {
        const int x = place(engine);
        const int y = place(engine);
        for (int i = 0; i <= k % 5; ++i) {  // one to five pixels along a row or a diagonal
            field.at(x + i, y + (k % 2) * i) += 5000.0;
        }
    }
    MemoryFrame frame(camera, field, 12);
    // A few lie on stars or next to each other.
    const std::size_t found = measure_detector(camera, 0, frame, {}, 1).stars.size();
    CHECK(found >= 56);
    CHECK(found <= 68);
}

TEST_CASE("hundreds of bright cosmic rays do not crowd the stars out") {
    const Camera camera = make_camera(kSide, kSide, 1, 1);
    Field field = field_of(isolated_stars(10));
    std::mt19937_64 engine(18);
    std::uniform_int_distribution<int> place(0, kSide - 1);
    for (int k = 0; k < 700; ++k) {
        field.at(place(engine), place(engine)) += 50000.0;
    }
    MemoryFrame frame(camera, field, 19);
    // One for each 374 pixels: the 80 pixels of a star's window are clean with probability
    // exp(-80 / 374) = 0.81, 52 +- 3 of 64.
    const std::size_t found = measure_detector(camera, 0, frame, {}, 1).stars.size();
    CHECK(found >= 40);
    CHECK(found <= 68);
}

TEST_CASE("empty, crowded and strongly lit fields end with sane numbers") {
    const Camera camera = make_camera(kSide, kSide, 2, 2, kAllCorners);
    std::mt19937_64 engine(13);
    std::uniform_real_distribution<double> uniform;
    Field field(kSide, kSide, kSky);
    SECTION("empty") {
        MemoryFrame frame(camera, field, 14);
        const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 1);
        CHECK(digest.stars.empty());
        CHECK(digest.psf.source == PsfSource::none);
        // 5 sigma: 2.9e-7 of 262,144 pixels, 0.08 expected.
        std::size_t kept = 0;
        for (const AmplifierDigest& amplifier : digest.amplifiers) {
            kept += amplifier.values.size();
        }
        CHECK(kept <= 3);
    }
    SECTION("crowded") {
        for (int k = 0; k < 2000; ++k) {  // one for each 131 pixels
            add_star(field, kSide * uniform(engine), kSide * uniform(engine),
                     400.0 / std::pow(uniform(engine), 1.3), 2.8, 3.0, 15);
        }
        MemoryFrame frame(camera, field, 15);
        const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 1);
        CHECK(digest.stars.size() > 50);
        for (const AmplifierDigest& amplifier : digest.amplifiers) {
            // Unresolved light is part of what a detection must stand out from.
            CHECK(amplifier.noise_adu > 0.95 * std::sqrt(436.0) / 2.0);
            CHECK(amplifier.noise_adu < 1.6 * std::sqrt(436.0) / 2.0);
        }
        CHECK(digest.psf.source == PsfSource::measured);
        CHECK(digest.psf.noise_equivalent_area_px ==
              Approx(moffat_noise_equivalent_area(2.8, 3.0, 12)).epsilon(0.1));
    }
    SECTION("the halo of a star out of the field") {
        for (int y = 0; y < kSide; ++y) {
            for (int x = 0; x < kSide; ++x) {
                field.at(x, y) += 3e6 / (400.0 + std::pow(x + 20.0, 2) + std::pow(y - 250.0, 2));
            }
        }
        MemoryFrame frame(camera, field, 16);
        const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 1);
        CHECK(digest.stars.empty());
        for (const AmplifierDigest& amplifier : digest.amplifiers) {
            CHECK(amplifier.state == AmplifierState::ok);
        }
    }
}

TEST_CASE("amplifiers of a few pixels are measured or say why not") {
    for (const auto& [width, height] : {std::pair{1, 1}, {2, 1}, {1, 7}, {3, 2}, {9, 9}, {40, 5}}) {
        const Camera camera = make_camera(width, height, 1, 1);
        MemoryFrame frame(camera, Field(width, height, kSky), 17);
        const DetectorDigest digest = measure_detector(camera, 0, frame, {}, 1);
        const AmplifierDigest& amplifier = digest.amplifiers.front();
        CHECK((amplifier.state == AmplifierState::ok) == amplifier.reason.empty());
        CHECK(digest.stars.empty());
    }
}
