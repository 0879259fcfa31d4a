#include "simulate/coupling.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <set>

#include "simulate/characterise.h"
#include "simulate/small_world.h"
#include "simulate/video.h"

namespace straymark::simulate {
namespace {

constexpr int kTicks = 40;

/// One source, silent but for `signal_adu` at tick 20; what the leak makes of it.
std::vector<float> echo_of_pulse(const Leak& leak, float signal_adu, float decay = 0.25F) {
    LevelRow rows(3, kTicks);
    rows.of(0)[20] = signal_adu;
    settle(decay, rows.of(0), kTicks, rows.of(1));
    add_leak(leak, rows.of(0), rows.of(1), 0, kTicks, rows.of(2));
    return {rows.of(2), rows.of(2) + kTicks};
}

Leak resistive(float strength) {
    Leak leak;
    leak.resistive = strength;
    return leak;
}

/// A world in which only one leak exists.
World world_of(const Scenario& scenario, Leak leak) {
    World world{scenario, build_instrument(scenario), {}, {}};
    world.coupling.by_clock = {{leak}};
    world.coupling.tail_decay = 0.25F;
    return world;
}

// Single precision.
constexpr double kRounding = 1e-6;

}  // namespace

TEST_CASE("a resistive leak follows the level at the same tick, with its sign") {
    const float strength = GENERATE(1e-3F, -2e-3F);
    const std::vector<float> echo = echo_of_pulse(resistive(strength), 50000.0F);
    for (int t = 0; t < kTicks; ++t) {
        CHECK(echo[t] == Approx(t == 20 ? strength * 50000.0F : 0.0F));
    }
}

TEST_CASE("a delayed leak comes whole ticks later") {
    Leak leak = resistive(1e-3F);
    leak.delay_ticks = 2;
    const std::vector<float> echo = echo_of_pulse(leak, 50000.0F);
    CHECK(echo[22] == Approx(50.0F));
    CHECK(echo[20] == 0.0F);
    CHECK(echo[21] == 0.0F);
}

TEST_CASE("a capacitive leak follows the change: it rises with the pulse and dips behind it") {
    Leak leak;
    leak.capacitive = 1e-3F;
    const std::vector<float> echo = echo_of_pulse(leak, 50000.0F);
    CHECK(echo[20] == Approx(50.0F));
    CHECK(echo[21] == Approx(-50.0F));
    CHECK(echo[19] == 0.0F);
    CHECK(echo[22] == 0.0F);
}

TEST_CASE("a slow leak trails behind and sums to its strength") {
    Leak leak;
    leak.slow = 1e-3F;
    const std::vector<float> echo = echo_of_pulse(leak, 50000.0F);
    CHECK(echo[20] == 0.0F);
    CHECK(echo[21] == Approx(50.0 * 0.75));         // 1 - decay of it in the first tick
    CHECK(echo[22] == Approx(50.0 * 0.75 * 0.25));  // then decay from tick to tick
    double sum = 0.0;
    for (const float value : echo) {
        sum += static_cast<double>(value);
    }
    CHECK(sum == Approx(50.0).epsilon(kRounding));
}

TEST_CASE("a bending leak is straight below its onset and bends beyond") {
    Leak leak = resistive(1e-3F);
    leak.bending = -5e-4F;
    leak.onset_adu = 30000.0F;
    leak.width_adu = 8000.0F;
    CHECK(echo_of_pulse(leak, 30000.0F)[20] == Approx(30.0));
    // 15,000 above: hypotenuse of 15,000 and 8,000 is 17,000.
    CHECK(echo_of_pulse(leak, 45000.0F)[20] == Approx(45.0 - 5e-4 * 9000.0));
}

TEST_CASE("no echo exceeds the leak's bound") {
    Leak leak = resistive(1e-3F);
    leak.capacitive = -4e-4F;
    leak.slow = 3e-4F;
    leak.bending = 6e-4F;
    leak.onset_adu = 1000.0F;
    leak.width_adu = 500.0F;
    for (const float value : echo_of_pulse(leak, 60000.0F)) {
        CHECK(std::fabs(value) <= leak.bound() * 60000.0F * (1.0F + 1e-5F));
    }
}

TEST_CASE("one bright pixel echoes at the tick and row of its own moment in the other's time") {
    // Source p/ll at its 11th data tick and 6th row; victims with other corners and the other
    // detector. Each victim's pixel of that moment is counted from its own node by hand.
    struct Expected {
        int victim, x, y;
    };
    const Expected expected = GENERATE(Expected{1, 95 - 10, 5},        // p/lr
                                       Expected{2, 10, 63 - 5},        // p/ul
                                       Expected{3, 95 - 10, 63 - 5},   // p/ur
                                       Expected{4, 10, 5},             // q/ll
                                       Expected{7, 95 - 10, 63 - 5});  // q/ur
    Leak leak = resistive(-1e-3F);
    leak.source = 0;
    leak.victim = expected.victim;
    const World world = world_of(small_scenario(), leak);
    std::vector<Image> excess(2, Image(96 * 64, 0.0F));
    excess[0][5 * 96 + 10] = 60000.0F;
    std::vector<Image> added(2, Image(96 * 64, 0.0F));
    TruthRow truth(world.instrument, world.coupling, 0, 400.0);
    for (int row = 0; row < 32; ++row) {
        truth.add(excess, row, added);
    }
    const Channel& source = world.instrument.channels[0];
    const Channel& victim = world.instrument.channels[expected.victim];
    const double echo_e = -1e-3 * 60000.0 / source.gain_e_per_adu * victim.gain_e_per_adu;
    for (int d = 0; d < 2; ++d) {
        for (int y = 0; y < 64; ++y) {
            for (int x = 0; x < 96; ++x) {
                const bool here = d == victim.detector && x == expected.x && y == expected.y;
                CHECK(static_cast<double>(added[d][y * 96 + x]) ==
                      Approx(here ? echo_e : 0.0).epsilon(1e-5).margin(1e-4));
            }
        }
    }
    const std::vector<Echo> echoes = list_echoes(world.instrument, world.coupling, excess, 400.0,
                                                 std::vector<double>(8, 20.0), 0.05, 1);
    REQUIRE(echoes.size() == 1);
    CHECK(echoes[0].victim == expected.victim);
    CHECK(echoes[0].crest_x == expected.x);
    CHECK(echoes[0].crest_y == expected.y);
    CHECK(echoes[0].source_pixel.x == Approx(10.0));
    CHECK(echoes[0].source_pixel.y == Approx(5.0));
    CHECK(echoes[0].peak_e == Approx(echo_e).epsilon(1e-4));
    CHECK(echoes[0].total_e == Approx(echo_e).epsilon(1e-4));
}

TEST_CASE("the crest of a flat-topped echo lies inside, not at its corner") {
    Leak leak = resistive(1e-3F);
    leak.source = 0;
    leak.victim = 4;  // q/ll: the same corner
    const World world = world_of(small_scenario(), leak);
    std::vector<Image> excess(2, Image(96 * 64, 0.0F));
    for (int y = 10; y < 15; ++y) {
        for (int x = 20; x < 25; ++x) {
            excess[0][y * 96 + x] = 60000.0F;
        }
    }
    const std::vector<Echo> echoes = list_echoes(world.instrument, world.coupling, excess, 400.0,
                                                 std::vector<double>(8, 20.0), 0.05, 1);
    REQUIRE(echoes.size() == 1);
    CHECK(echoes[0].crest_x == 22);
    CHECK(echoes[0].crest_y == 12);
    CHECK(echoes[0].total_e == Approx(25.0 * echoes[0].peak_e));
}

TEST_CASE("an echo that falls into the victim's prescan is not listed") {
    Scenario scenario = small_scenario();
    LayoutPlan late = small_layout();
    late.name = "late";
    late.prescan_ticks = 7;
    late.overscan_ticks = 9;
    scenario.layouts.push_back(late);
    scenario.detectors[1].layout = 1;
    Leak leak = resistive(1e-3F);
    leak.source = 0;
    leak.victim = 4;
    const World world = world_of(scenario, leak);
    std::vector<Image> excess(2, Image(96 * 64, 0.0F));
    excess[0][5 * 96 + 1] = 60000.0F;  // tick 5 of the row: before the victim's first data tick
    CHECK(list_echoes(world.instrument, world.coupling, excess, 400.0, std::vector<double>(8, 20.0),
                      0.05, 1)
              .empty());
}

TEST_CASE("different prescans shift an echo: channels share the clock, not the data section") {
    Scenario scenario = small_scenario();
    LayoutPlan late = small_layout();
    late.name = "late";
    late.prescan_ticks = 7;  // three more than the other, three fewer of overscan
    late.overscan_ticks = 9;
    scenario.layouts.push_back(late);
    scenario.detectors[1].layout = 1;
    Leak leak = resistive(1e-3F);
    leak.source = 0;
    leak.victim = 4;  // q/ll
    const World world = world_of(scenario, leak);
    std::vector<Image> excess(2, Image(96 * 64, 0.0F));
    excess[0][5 * 96 + 10] = 60000.0F;
    std::vector<Image> added(2, Image(96 * 64, 0.0F));
    TruthRow truth(world.instrument, world.coupling, 0, 0.0);
    truth.add(excess, 5, added);
    CHECK(added[1][5 * 96 + 7] > 10.0F);
    CHECK(added[1][5 * 96 + 10] == 0.0F);
}

TEST_CASE("leaks are drawn within their stratum's bounds, and only among channels in step") {
    Scenario scenario = small_scenario();
    scenario.coupling.device = {{1e-4, 2e-3}, 0.5, 0.3, 0.2};
    scenario.coupling.derivative_fraction = 0.3;
    scenario.coupling.derivative_ratio = {0.2, 0.9};
    scenario.detectors[1].clock = "other";
    const Instrument instrument = build_instrument(scenario);
    const Coupling coupling = draw_coupling(scenario, instrument);
    REQUIRE(coupling.by_clock.size() == 2);
    int negative = 0;
    for (const std::vector<Leak>& leaks : coupling.by_clock) {
        for (const Leak& leak : leaks) {
            const Channel& source = instrument.channels[leak.source];
            const Channel& victim = instrument.channels[leak.victim];
            CHECK(source.detector == victim.detector);
            CHECK(leak.source != leak.victim);
            const double fall = std::pow(0.5, std::abs(source.number - victim.number) - 1);
            CHECK(std::fabs(leak.resistive) <= 2e-3 * fall * (1 + kRounding));
            CHECK(std::fabs(leak.resistive) >= 1e-4 * fall * (1 - kRounding));
            negative += leak.resistive < 0.0F ? 1 : 0;
        }
    }
    CHECK(negative > 0);
}

TEST_CASE("what a laboratory measures is what was built in") {
    Scenario scenario = small_scenario();
    scenario.characterisation = {1e-12, 0.0};
    Leak leak = resistive(1e-3F);
    leak.source = 0;
    leak.victim = 5;
    leak.capacitive = 3e-4F;
    leak.slow = 2e-4F;
    leak.delay_ticks = 1;
    leak.bending = 4e-4F;
    leak.onset_adu = 30000.0F;
    leak.width_adu = 9000.0F;
    const World world = world_of(scenario, leak);
    const Characterisation known = characterise(scenario, world.instrument, world.coupling, 400.0);
    CHECK(known.pairs.size() == 8 * 7);
    for (const PairMeasurement& pair : known.pairs) {
        if (pair.source != 0 || pair.victim != 5) {
            CHECK(std::fabs(pair.coefficient.value) < 1e-9);
            CHECK(pair.lags.empty());
            continue;
        }
        CHECK(pair.delay_ticks == 1);
        // Single precision of an echo of some 2 ADU: 1e-7 ADU of 1,000.
        constexpr double kSmall = 1e-9;
        CHECK(pair.coefficient.value == Approx(1.3e-3).margin(kSmall));
        REQUIRE(pair.lags.size() >= 2);
        CHECK(pair.lags[0].lag_ticks == 1);
        CHECK(pair.lags[0].coefficient.value == Approx(-3e-4 + 0.75 * 2e-4).margin(kSmall));
        CHECK(pair.lags[1].lag_ticks == 2);
        CHECK(pair.lags[1].coefficient.value == Approx(0.75 * 0.25 * 2e-4).margin(kSmall));
        REQUIRE(pair.bend);
        const Bend& bend = *pair.bend;
        // The onset counts from the empty field, 400 e; a cubic fits a hyperbola to a few percent.
        for (const double above_field : {35000.0, 45000.0, 55000.0}) {
            const double x = above_field - bend.onset_adu;
            const double cubic = x * (bend.c1 + x * (bend.c2 + x * bend.c3));
            const double level = above_field + 400.0 / world.instrument.channels[0].gain_e_per_adu;
            const double hyperbola = 4e-4 * (std::hypot(level - 30000.0, 9000.0) - 9000.0);
            CHECK(cubic == Approx(hyperbola).margin(0.03 * 4e-4 * 17000.0));
        }
    }
}

TEST_CASE("a full pixel behind a converter that clips looks like a stronger echo") {
    Scenario scenario = small_scenario();
    scenario.characterisation = {1e-12, 0.0};
    scenario.amplifiers.gain_e_per_adu = {1.5, 1.5};
    Leak leak = resistive(1e-3F);
    leak.source = 0;
    leak.victim = 5;
    const World world = world_of(scenario, leak);
    const Characterisation known = characterise(scenario, world.instrument, world.coupling, 300.0);
    for (const PairMeasurement& pair : known.pairs) {
        if (pair.source == 0 && pair.victim == 5) {
            REQUIRE(pair.bend);
            // Full well 120,000 e is 80,000 ADU; the converter ends at 65,535, of which bias takes
            // 1,000; the field's 300 e are 200 ADU of each.
            CHECK(pair.bend->clipped.value ==
                  Approx(1e-3 * (80000.0 - 200.0) / (65535.0 - 1000.0 - 200.0)).epsilon(1e-5));
        }
    }
    CHECK(saturation_adu(scenario, world.instrument, 0) == 65535.0);
}

}  // namespace straymark::simulate
