#include "simulate/exposure.h"

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <map>

#include "core/error.h"
#include "simulate/characterise.h"
#include "simulate/small_world.h"
#include "simulate/starlight.h"
#include "simulate/video.h"

namespace straymark::simulate {
namespace {

Scenario large_quiet_scenario() {
    Scenario scenario = small_scenario();
    scenario.layouts[0].width = 1024;
    scenario.layouts[0].height = 512;
    for (ChannelPlan& channel : scenario.layouts[0].channels) {
        channel.node_x = channel.node_x > 0 ? 1023 : 0;
        channel.node_y = channel.node_y > 0 ? 511 : 0;
        channel.ticks = 512;
        channel.rows = 256;
    }
    scenario.amplifiers.bias_drift_adu = 0.0;
    return scenario;
}

/// Stars whose light overflows, near the centres of the small world's detectors.
std::vector<SkyStar> bright_stars(const Scenario& scenario) {
    std::vector<SkyStar> stars;
    const Vec3 ahead = direction(84.0, 28.0);
    const double arcsec_per_mm = 1.0 / scenario.telescope.focal_length_mm / kArcsecond;
    for (const Vec2 place_mm : {Vec2{-0.9, 0.1}, Vec2{-0.5, -0.2}, Vec2{0.8, 0.15}}) {
        stars.push_back({nudged(ahead, {-place_mm.x * arcsec_per_mm, place_mm.y * arcsec_per_mm}),
                         stars.size() == 1 ? 14.5 : 12.0});
    }
    return stars;
}

struct Moments {
    double mean = 0.0;
    double variance_of_difference = 0.0;
};

/// Over the data pixels of one channel of two flats.
Moments moments(const Channel& channel, const std::vector<std::uint16_t>& a,
                const std::vector<std::uint16_t>& b) {
    Moments result;
    double squares = 0.0;
    double differences = 0.0;
    double count = 0.0;
    for (int row = 0; row < channel.rows; ++row) {
        for (int tick = channel.prescan; tick < channel.prescan + channel.ticks; ++tick) {
            const std::size_t i = static_cast<std::size_t>(row) * channel.ticks_in_row() + tick;
            const double d = static_cast<double>(a[i]) - static_cast<double>(b[i]);
            result.mean += 0.5 * (static_cast<double>(a[i]) + static_cast<double>(b[i]));
            differences += d;
            squares += d * d;
            count += 1.0;
        }
    }
    result.mean /= count;
    result.variance_of_difference = squares / count - std::pow(differences / count, 2.0);
    return result;
}

}  // namespace

TEST_CASE("flats' photon transfer gives gain and read noise within 1 %") {
    Scenario scenario = large_quiet_scenario();
    scenario.coupling.device.strength = {1e-9, 1e-9};  // no echoes in the transfer curve
    scenario.coupling.board.strength = {1e-9, 1e-9};
    scenario.coupling.rest.strength = {1e-9, 1e-9};
    scenario.exposures = {flat_plan(0.0), flat_plan(0.0), flat_plan(40000.0), flat_plan(40000.0)};
    const World world = world_with(scenario, {});
    std::vector<SimulatedExposure> flats;
    for (int i = 0; i < 4; ++i) {
        flats.push_back(expose(world, i, 2));
    }
    // 131,072 pixels in a pair: a variance is good to sqrt(2 / n) = 0.4 %, its root to 0.2 %.
    for (std::size_t c = 0; c < world.instrument.channels.size(); ++c) {
        const Channel& channel = world.instrument.channels[c];
        const Moments dark = moments(channel, flats[0].raw[c], flats[1].raw[c]);
        const Moments lit = moments(channel, flats[2].raw[c], flats[3].raw[c]);
        const double gain = 2.0 * (lit.mean - dark.mean) /
                            (lit.variance_of_difference - dark.variance_of_difference);
        // Less the converter's own rounding, 1/12 ADU^2 for each of the pair.
        const double read_noise_e =
            gain * std::sqrt(0.5 * dark.variance_of_difference - 1.0 / 12.0);
        constexpr double kFiveSigma = 0.02;
        CHECK(gain == Approx(channel.gain_e_per_adu).epsilon(kFiveSigma));
        CHECK(read_noise_e == Approx(channel.read_noise_e).epsilon(kFiveSigma));
    }
    // The mean over the eight channels of the ratios is good to 0.15 %.
    double gain_ratio = 0.0;
    double noise_ratio = 0.0;
    for (std::size_t c = 0; c < 8; ++c) {
        const Channel& channel = world.instrument.channels[c];
        const Moments dark = moments(channel, flats[0].raw[c], flats[1].raw[c]);
        const Moments lit = moments(channel, flats[2].raw[c], flats[3].raw[c]);
        const double gain = 2.0 * (lit.mean - dark.mean) /
                            (lit.variance_of_difference - dark.variance_of_difference);
        gain_ratio += gain / channel.gain_e_per_adu / 8.0;
        noise_ratio += gain * std::sqrt(0.5 * dark.variance_of_difference - 1.0 / 12.0) /
                       channel.read_noise_e / 8.0;
    }
    CHECK(gain_ratio == Approx(1.0).epsilon(0.01));
    CHECK(noise_ratio == Approx(1.0).epsilon(0.01));
}

TEST_CASE("an exposure is the same bit for bit with one thread and with two") {
    Scenario scenario = small_scenario();
    scenario.silicon.cosmic_rays_per_cm2_s = 20.0;
    scenario.silicon.pixel_response = 0.01;
    const World world = world_with(scenario, bright_stars(scenario));
    const SimulatedExposure one = expose(world, 0, 1);
    const SimulatedExposure two = expose(world, 0, 2);
    CHECK(one.raw == two.raw);
    CHECK(one.truth.crosstalk_e == two.truth.crosstalk_e);
    REQUIRE(one.truth.echoes.size() == two.truth.echoes.size());
    for (std::size_t i = 0; i < one.truth.echoes.size(); ++i) {
        CHECK(one.truth.echoes[i].peak_e == two.truth.echoes[i].peak_e);
        CHECK(one.truth.echoes[i].victim == two.truth.echoes[i].victim);
    }
}

TEST_CASE("another seed is another night") {
    Scenario scenario = small_scenario();
    const SimulatedExposure first = expose(world_with(scenario, {}), 0, 1);
    scenario.seed = 6;
    CHECK(first.raw != expose(world_with(scenario, {}), 0, 1).raw);
}

TEST_CASE("raw pixels with leaks, less those without, are the truth but for rounding") {
    Scenario scenario = small_scenario();
    scenario.coupling.board.strength = scenario.coupling.device.strength;
    scenario.coupling.rest.strength = scenario.coupling.device.strength;
    scenario.amplifiers.gain_e_per_adu = {2.0, 2.0};
    const World coupled = world_with(scenario, bright_stars(scenario));
    World apart = coupled;
    for (std::vector<Leak>& leaks : apart.coupling.by_clock) {
        leaks.clear();
    }
    const SimulatedExposure with = expose(coupled, 0, 2);
    const SimulatedExposure without = expose(apart, 0, 2);
    double largest = 0.0;
    double worst = 0.0;
    double sum = 0.0;
    int count = 0;
    for (std::size_t c = 0; c < with.raw.size(); ++c) {
        const Channel& channel = coupled.instrument.channels[c];
        // The sky leaks evenly and is no echo: seven sources of equal gain, each 1e-3 or less.
        for (int row = 0; row < channel.rows; ++row) {
            for (int tick = 0; tick < channel.ticks; ++tick) {
                const std::size_t i =
                    static_cast<std::size_t>(row) * channel.ticks_in_row() + channel.prescan + tick;
                const double added =
                    channel.gain_e_per_adu *
                    (static_cast<double>(with.raw[c][i]) - static_cast<double>(without.raw[c][i]));
                const double truth = static_cast<double>(
                    with.truth.crosstalk_e[channel.detector][channel.pixel(tick, row)]);
                largest = std::max(largest, std::fabs(truth));
                if (with.raw[c][i] < 65535) {
                    worst = std::max(worst, std::fabs(added - truth));
                    sum += added - truth;
                    ++count;
                }
            }
        }
    }
    CHECK(largest > 50.0);
    // Rounding of two numbers by up to half an ADU of 2 e each, and the sky's leak of 7 x 0.4 e.
    const double sky_leak = 7.0 * 1e-3 * with.even_e;
    CHECK(worst < 2.0 + sky_leak + 0.5);
    CHECK(std::fabs(sum / count) < sky_leak + 0.02);
}

/// Charge above the sky within 12 pixels of a place on the first detector, and its centroid.
struct Found {
    double sum_e = 0.0;
    Vec2 centroid;
};
Found found_near(const World& world, const SimulatedExposure& exposure, Vec2 near) {
    Found found;
    Vec2 moment;
    for (int c = 0; c < world.instrument.chips[0].channels; ++c) {
        const Channel& channel = world.instrument.channels[c];
        for (int row = 0; row < channel.rows; ++row) {
            for (int tick = 0; tick < channel.ticks; ++tick) {
                const int pixel = static_cast<int>(channel.pixel(tick, row));
                const int x = pixel % 96;
                const int y = pixel / 96;
                if (std::hypot(x - near.x, y - near.y) >= 12.0) {
                    continue;
                }
                const std::size_t i =
                    static_cast<std::size_t>(row) * channel.ticks_in_row() + channel.prescan + tick;
                const double above_e =
                    (exposure.raw[c][i] - channel.bias_adu) * channel.gain_e_per_adu -
                    exposure.even_e;
                found.sum_e += above_e;
                moment = moment + above_e * Vec2{static_cast<double>(x), static_cast<double>(y)};
            }
        }
    }
    found.centroid = (1.0 / found.sum_e) * moment;
    return found;
}

Scenario without_leaks(Scenario scenario) {
    scenario.coupling.device.zero_fraction = 1.0;
    scenario.coupling.board.zero_fraction = 1.0;
    scenario.coupling.rest.zero_fraction = 1.0;
    return scenario;
}

// 0.8 mm to the east of the boresight: the sky with north up has east on the left, so a star there
// falls on the centre of detector p.
std::vector<SkyStar> star_on_p(double mag) {
    return {{nudged(direction(84.0, 28.0), {0.8 / 8280.0 / kArcsecond, 0.0}), mag}};
}

TEST_CASE("a star stands where the pointing puts it, as bright as its magnitude says") {
    Scenario scenario = without_leaks(small_scenario());
    scenario.telescope.pointing_error_arcsec = 0.0;
    scenario.telescope.camera_angle_error_deg = 0.0;
    const World world = world_with(scenario, star_on_p(15.0));
    const Found star = found_near(world, expose(world, 0, 1), {47.5, 31.5});
    // 7e5 electrons: the centroid is good to some 0.01 pixel.
    CHECK(star.centroid.x == Approx(47.5).margin(0.05));
    CHECK(star.centroid.y == Approx(31.5).margin(0.05));
    // Magnitude 15 through zero point 25.9 in 30 s, less extinction, within 12 pixels.
    const double full = 30.0 * std::pow(10.0, 0.4 * (25.9 - 15.0));
    CHECK(star.sum_e < 1.01 * full);
    CHECK(star.sum_e > 0.85 * full);
}

TEST_CASE("the sky is seen from where the telescope is, not from where its header says") {
    Scenario scenario = without_leaks(small_scenario());
    scenario.telescope.pointing_error_arcsec = 1.0;  // 2.7 pixels
    scenario.telescope.camera_angle_error_deg = 0.5;
    const World world = world_with(scenario, star_on_p(15.0));
    const SimulatedExposure exposure = expose(world, 0, 1);
    const Chip& chip = world.instrument.chips[0];
    const Vec3 star = world.fields[0][0].towards;
    const auto seen_from = [&](Vec3 ahead, double angle) {
        return chip.pixel(*Aim(scenario.telescope, ahead, angle).image(star));
    };
    const Vec2 truth = seen_from(exposure.pointing.ahead, exposure.pointing.camera_angle_deg);
    const Found found = found_near(world, exposure, truth);
    CHECK(found.centroid.x == Approx(truth.x).margin(0.1));
    CHECK(found.centroid.y == Approx(truth.y).margin(0.1));
    // Errors below a twentieth of their sigma are rare, and the seed is fixed.
    const Vec3 header =
        direction(exposure.pointing.header.ra_deg, exposure.pointing.header.dec_deg);
    const Vec3 miss = exposure.pointing.ahead - header;
    CHECK(std::sqrt(dot(miss, miss)) / kArcsecond > 0.05);
    CHECK(std::fabs(exposure.pointing.camera_angle_deg -
                    exposure.pointing.header_camera_angle_deg) > 0.025);
}

TEST_CASE("the image's long axis is one direction of the focal plane on every detector") {
    Scenario scenario = small_scenario();
    scenario.seeing = {3.0, 0.3, 30.0};
    scenario.detectors[1].row_vector = {0.0, 1.0};  // q mirrored: columns the other way, rows not
    const World world = world_with(scenario, {});
    const SimulatedExposure exposure = expose(world, 0, 1);
    const auto product_of_inertia = [&](int detector) {
        double sum = 0.0;
        for (int y = 0; y < kSpreadSide; ++y) {
            for (int x = 0; x < kSpreadSide; ++x) {
                sum += exposure.truth.spread[detector][y * kSpreadSide + x] *
                       (x - kSpreadSide / 2) * (y - kSpreadSide / 2);
            }
        }
        return sum;
    };
    // 30 degrees from +x: along x and y of p, across on q.
    CHECK(product_of_inertia(0) > 0.1);
    CHECK(product_of_inertia(1) == Approx(-product_of_inertia(0)));
}

TEST_CASE("overscan holds bias and read noise only") {
    const Scenario scenario = large_quiet_scenario();
    const World world = world_with(scenario, {});
    const SimulatedExposure exposure = expose(world, 0, 2);
    const Channel& channel = world.instrument.channels[0];
    double sum = 0.0;
    double squares = 0.0;
    double count = 0.0;
    for (int row = 0; row < channel.rows; ++row) {
        for (int t = channel.prescan + channel.ticks + 4; t < channel.ticks_in_row(); ++t) {
            const double value =
                exposure.raw[0][static_cast<std::size_t>(row) * channel.ticks_in_row() + t] -
                channel.bias_adu;
            sum += value;
            squares += value * value;
            count += 1.0;
        }
    }
    const double noise_adu =
        std::hypot(channel.read_noise_e / channel.gain_e_per_adu, std::sqrt(1.0 / 12.0));
    CHECK(std::fabs(sum / count) < 5.0 * noise_adu / std::sqrt(count));
    CHECK(std::sqrt(squares / count) == Approx(noise_adu).epsilon(5.0 / std::sqrt(2.0 * count)));
}

TEST_CASE("a field below the horizon is refused with the exposure's name") {
    Scenario scenario = small_scenario();
    scenario.exposures[0].mjd += 0.5;  // twelve hours later
    CHECK_THROWS_MATCHES(expose(world_with(scenario, {}), 0, 1), InputError,
                         Catch::Matchers::Predicate<InputError>([](const InputError& error) {
                             return error.fault().place.find("one") != std::string::npos;
                         }));
}

}  // namespace straymark::simulate
