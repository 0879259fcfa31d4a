#include "io/scenario_camera.h"

#include <algorithm>
#include <cmath>
#include <cstdlib>
#include <fmt/format.h>
#include <map>
#include <set>
#include <string>
#include <vector>

namespace straymark::io {
namespace {

using simulate::ChannelPlan;
using simulate::DetectorPlan;
using simulate::LayoutPlan;
using simulate::Scenario;
using simulate::Step;
using simulate::Vec2;

constexpr int kLargestSide = 16384;
constexpr int kMostDetectors = 1024;
constexpr int kMostChannels = 1 << 14;
constexpr std::size_t kLongestId = 32;
constexpr NumberRange kPlace{-1e4, 1e4, "mm"};

/// One pixel along x or y.
Step read_step(const YamlValue& value) {
    const std::vector<YamlValue> items = value.items(2, 2);
    const Step step{items[0].integer(-1, 1), items[1].integer(-1, 1)};
    if (std::abs(step.dx) + std::abs(step.dy) != 1) {
        value.refuse("a step of one pixel along x or y: [1, 0], [-1, 0], [0, 1] or [0, -1]");
    }
    return step;
}

/// Refuses the section that leaves the detector at its far corner.
void require_inside(const YamlValue& value, const ChannelPlan& channel, const LayoutPlan& layout) {
    const int x = channel.node_x + (channel.ticks - 1) * channel.serial.dx +
                  (channel.rows - 1) * channel.parallel.dx;
    const int y = channel.node_y + (channel.ticks - 1) * channel.serial.dy +
                  (channel.rows - 1) * channel.parallel.dy;
    if (x < 0 || x >= layout.width || y < 0 || y >= layout.height) {
        value.refuse(fmt::format("a section inside {} x {} pixels", layout.width, layout.height),
                     "check node, serial, parallel, ticks and rows",
                     fmt::format("a last pixel at [{}, {}]", x + 1, y + 1));
    }
}

ChannelPlan read_channel(const YamlValue& value, const LayoutPlan& layout) {
    const YamlMapping map = value.mapping({"id", "node", "serial", "parallel", "ticks", "rows"});
    ChannelPlan channel;
    channel.id = map.required("id").text(kLongestId);
    const std::vector<YamlValue> node = map.required("node").items(2, 2);
    channel.node_x = node[0].integer(1, layout.width) - 1;
    channel.node_y = node[1].integer(1, layout.height) - 1;
    channel.serial = read_step(map.required("serial"));
    channel.parallel = read_step(map.required("parallel"));
    if (std::abs(channel.serial.dx) == std::abs(channel.parallel.dx)) {
        map.required("parallel").refuse("a step at right angles to `serial`");
    }
    channel.ticks = map.required("ticks").integer(1, kLargestSide);
    channel.rows = map.required("rows").integer(1, kLargestSide);
    require_inside(value, channel, layout);
    return channel;
}

LayoutPlan read_layout(const std::string& name, const YamlValue& value) {
    const YamlMapping map = value.mapping({"size", "prescan", "overscan", "amplifiers"});
    LayoutPlan layout;
    layout.name = name;
    const std::vector<YamlValue> size = map.required("size").items(2, 2);
    layout.width = size[0].integer(1, kLargestSide);
    layout.height = size[1].integer(1, kLargestSide);
    layout.prescan_ticks = map.required("prescan").integer(0, kLargestSide);
    layout.overscan_ticks = map.required("overscan").integer(1, kLargestSide);
    std::set<std::string> ids;
    for (const YamlValue& item : map.required("amplifiers").items(1, 4096)) {
        ChannelPlan channel = read_channel(item, layout);
        if (!ids.insert(channel.id).second) {
            item.refuse("an id of its own", "", "amplifier '" + channel.id + "' a second time");
        }
        if (!layout.channels.empty() &&
            std::abs(channel.serial.dx) != std::abs(layout.channels.front().serial.dx)) {
            item.refuse("the serial axis of the layout's first amplifier");
        }
        layout.channels.push_back(std::move(channel));
    }
    return layout;
}

Vec2 read_direction(const YamlValue& value) {
    const std::vector<YamlValue> items = value.items(2, 2);
    const Vec2 given{items[0].number({-1.0, 1.0}), items[1].number({-1.0, 1.0})};
    const double length = std::hypot(given.x, given.y);
    constexpr double kUnitWithin = 1e-3;
    if (std::fabs(length - 1.0) > kUnitWithin) {
        value.refuse("a direction of length 1");
    }
    return (1.0 / length) * given;
}

DetectorPlan read_detector(const YamlValue& value, const std::map<std::string, int>& layouts) {
    const YamlMapping map = value.mapping(
        {"id", "layout", "centre_mm", "columns_towards", "rows_towards", "clock", "board"});
    DetectorPlan detector;
    detector.id = map.required("id").text(kLongestId);
    const YamlValue layout = map.required("layout");
    const auto found = layouts.find(layout.text(kLongestId));
    if (found == layouts.end()) {
        layout.refuse("a name under `layouts`");
    }
    detector.layout = found->second;
    const std::vector<YamlValue> centre = map.required("centre_mm").items(2, 2);
    detector.centre_mm = {centre[0].number(kPlace), centre[1].number(kPlace)};
    detector.column_vector = read_direction(map.required("columns_towards"));
    detector.row_vector = read_direction(map.required("rows_towards"));
    constexpr double kRightAngle = 1e-3;
    if (std::fabs(dot(detector.column_vector, detector.row_vector)) > kRightAngle) {
        map.required("rows_towards").refuse("a direction at right angles to `columns_towards`");
    }
    detector.clock = map.required("clock").text(kLongestId);
    detector.board = map.required("board").text(kLongestId);
    return detector;
}

/// Amplifiers of one clock put out their levels in step: as many ticks and rows each.
void require_in_step(const YamlValue& value, const DetectorPlan& detector, const LayoutPlan& layout,
                     std::map<std::string, std::pair<int, int>>& clocks) {
    for (const ChannelPlan& channel : layout.channels) {
        const std::pair shape(layout.ticks_in_row(channel), channel.rows);
        const auto [clock, first] = clocks.emplace(detector.clock, shape);
        if (clock->second != shape) {
            value.refuse(fmt::format("{} ticks and {} rows, as the first amplifier of clock '{}'",
                                     clock->second.first, clock->second.second, detector.clock),
                         "change prescan, overscan or rows, or give it another clock",
                         fmt::format("amplifier {} with {} ticks and {} rows", channel.id,
                                     shape.first, shape.second));
        }
    }
}

}  // namespace

void read_scenario_camera(const YamlMapping& top, Scenario& scenario) {
    std::map<std::string, int> layouts;
    for (const auto& [name, value] : top.required("layouts").entries(1, 64)) {
        layouts.emplace(name, static_cast<int>(scenario.layouts.size()));
        scenario.layouts.push_back(read_layout(name, value));
    }
    std::set<std::string> ids;
    std::map<std::string, std::pair<int, int>> clocks;
    std::size_t channels = 0;
    for (const YamlValue& item : top.required("detectors").items(1, kMostDetectors)) {
        DetectorPlan detector = read_detector(item, layouts);
        if (!ids.insert(detector.id).second) {
            item.refuse("an id of its own", "", "detector '" + detector.id + "' a second time");
        }
        const LayoutPlan& layout = scenario.layouts[detector.layout];
        require_in_step(item, detector, layout, clocks);
        channels += layout.channels.size();
        if (channels > kMostChannels) {
            item.refuse(fmt::format("at most {} amplifiers in all", kMostChannels));
        }
        scenario.detectors.push_back(std::move(detector));
    }
}

}  // namespace straymark::io
