#include "simulate/instrument.h"

#include <algorithm>
#include <cassert>

#include "core/random.h"
#include "simulate/streams.h"

namespace straymark::simulate {
namespace {

double drawn(RandomStream& stream, Range range) {
    return range.low + (range.high - range.low) * stream.uniform();
}

Chip chip_of(const Scenario& scenario, int index) {
    const DetectorPlan& plan = scenario.detectors[index];
    const LayoutPlan& layout = scenario.layouts[plan.layout];
    const double pixel_mm = scenario.silicon.pixel_um / 1000.0;
    Chip chip;
    chip.id = plan.id;
    chip.board = plan.board;
    chip.width = layout.width;
    chip.height = layout.height;
    chip.column_mm = pixel_mm * plan.column_vector;
    chip.row_mm = pixel_mm * plan.row_vector;
    chip.first_pixel_mm = plan.centre_mm - 0.5 * (layout.width - 1) * chip.column_mm -
                          0.5 * (layout.height - 1) * chip.row_mm;
    chip.bleeds_along_x = layout.channels.front().parallel.dx != 0;
    RandomStream stream(scenario.seed, stream_of(Purpose::detector, 0, index));
    chip.full_well_e = drawn(stream, scenario.silicon.full_well_e);
    return chip;
}

Channel channel_of(const Scenario& scenario, const Chip& chip, int detector, int number,
                   int channel_index) {
    const LayoutPlan& layout = scenario.layouts[scenario.detectors[detector].layout];
    const ChannelPlan& plan = layout.channels[number];
    const auto index_step = [&](Step step) {
        return step.dx + static_cast<std::ptrdiff_t>(step.dy) * chip.width;
    };
    Channel channel;
    channel.name = chip.id + "/" + plan.id;
    channel.detector = detector;
    channel.number = number;
    channel.prescan = layout.prescan_ticks;
    channel.ticks = plan.ticks;
    channel.overscan = layout.overscan_ticks;
    channel.rows = plan.rows;
    channel.first_pixel = index_step({plan.node_x, plan.node_y});
    channel.tick_step = index_step(plan.serial);
    channel.row_step = index_step(plan.parallel);
    RandomStream stream(scenario.seed, stream_of(Purpose::channel, 0, channel_index));
    channel.gain_e_per_adu = drawn(stream, scenario.amplifiers.gain_e_per_adu);
    channel.read_noise_e = drawn(stream, scenario.amplifiers.read_noise_e);
    channel.bias_adu = drawn(stream, scenario.amplifiers.bias_adu);
    return channel;
}

/// Index of the clock of that name, made if new.
int clock_named(std::vector<ClockGroup>& clocks, const std::string& name) {
    const auto found = std::find_if(clocks.begin(), clocks.end(),
                                    [&](const ClockGroup& clock) { return clock.name == name; });
    if (found != clocks.end()) {
        return static_cast<int>(found - clocks.begin());
    }
    clocks.push_back({name, {}, 0, 0});
    return static_cast<int>(clocks.size()) - 1;
}

}  // namespace

Vec2 Chip::pixel(Vec2 focal_mm) const {
    const Vec2 from_first = focal_mm - first_pixel_mm;
    return {dot(from_first, column_mm) / dot(column_mm, column_mm),
            dot(from_first, row_mm) / dot(row_mm, row_mm)};
}

Vec2 Chip::focal(Vec2 pixel) const {
    return first_pixel_mm + pixel.x * column_mm + pixel.y * row_mm;
}

Instrument build_instrument(const Scenario& scenario) {
    Instrument instrument;
    for (int d = 0; d < static_cast<int>(scenario.detectors.size()); ++d) {
        Chip chip = chip_of(scenario, d);
        chip.clock = clock_named(instrument.clocks, scenario.detectors[d].clock);
        chip.first_channel = static_cast<int>(instrument.channels.size());
        chip.channels =
            static_cast<int>(scenario.layouts[scenario.detectors[d].layout].channels.size());
        ClockGroup& clock = instrument.clocks[chip.clock];
        for (int number = 0; number < chip.channels; ++number) {
            const int index = static_cast<int>(instrument.channels.size());
            Channel channel = channel_of(scenario, chip, d, number, index);
            channel.place = static_cast<int>(clock.channels.size());
            assert(clock.channels.empty() ||
                   (clock.ticks_in_row == channel.ticks_in_row() && clock.rows == channel.rows));
            clock.ticks_in_row = channel.ticks_in_row();
            clock.rows = channel.rows;
            clock.channels.push_back(index);
            instrument.channels.push_back(channel);
        }
        instrument.chips.push_back(chip);
    }
    return instrument;
}

}  // namespace straymark::simulate
