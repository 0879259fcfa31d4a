#include "io/camera_detectors.h"

#include <algorithm>
#include <array>
#include <cstdint>
#include <fmt/format.h>
#include <set>

#include "io/fits_cards.h"

namespace straymark::io {
namespace {

constexpr int kLargestSide = 32768;  // pixels
constexpr std::size_t kMostLayouts = 64;
constexpr std::size_t kMostAmplifiersOfLayout = 1024;
constexpr std::size_t kMostDetectors = 4096;
constexpr std::size_t kMostAmplifiers = 65536;
constexpr std::size_t kLongestName = 64;
constexpr NumberRange kPlace{-1e4, 1e4, "mm"};
constexpr NumberRange kAngle{-360.0, 360.0, "deg"};

/// One detector type: what its amplifiers share.
struct Layout {
    int width = 0;
    int height = 0;
    SerialAxis serial = SerialAxis::x;
    RowRead read = RowRead::transfer;
    std::vector<Amplifier> amplifiers;  ///< clock not yet known
};

/// A FITS section, 1-based and inclusive, inside a detector; 0-based and half-open here.
PixelBox read_section(const YamlValue& value, int width, int height) {
    const std::vector<YamlValue> ends = value.items(4, 4);
    const PixelBox box{ends[0].integer(1, width) - 1, ends[2].integer(1, height) - 1,
                       ends[1].integer(1, width), ends[3].integer(1, height)};
    if (box.empty()) {
        value.refuse("[x1, x2, y1, y2] with x1 <= x2 and y1 <= y2",
                     "the corner, not the order, says where reading begins",
                     fmt::format("[{}, {}, {}, {}]", box.x0 + 1, box.x1, box.y0 + 1, box.y1));
    }
    return box;
}

void require_tiling(const YamlValue& list, const Layout& layout) {
    const std::vector<YamlValue> items = list.items(1, kMostAmplifiersOfLayout);
    std::int64_t covered = 0;
    for (std::size_t i = 0; i < layout.amplifiers.size(); ++i) {
        const PixelBox& box = layout.amplifiers[i].readout.section();
        covered += static_cast<std::int64_t>(box.width()) * box.height();
        for (std::size_t j = 0; j < i; ++j) {
            const Amplifier& other = layout.amplifiers[j];
            if (!box.intersected(other.readout.section()).empty()) {
                items[i].refuse("sections that do not overlap", "",
                                fmt::format("a section that overlaps that of {}", other.id));
            }
        }
    }
    const std::int64_t area = static_cast<std::int64_t>(layout.width) * layout.height;
    if (covered != area) {
        list.refuse(
            fmt::format("sections that cover the whole detector, {} x {}", layout.width,
                        layout.height),
            "give every pixel of `size` an amplifier, or make `size` smaller",
            fmt::format("sections that leave {} pixels without an amplifier", area - covered));
    }
}

Layout read_layout(const YamlValue& value) {
    const YamlMapping map = value.mapping({"size", "prescan", "serial", "read", "amplifiers"});
    Layout layout;
    const std::vector<YamlValue> size = map.required("size").items(2, 2);
    layout.width = size[0].integer(1, kLargestSide);
    layout.height = size[1].integer(1, kLargestSide);
    if (const auto serial = map.optional("serial")) {
        layout.serial = serial->choice<SerialAxis>({{"x", SerialAxis::x}, {"y", SerialAxis::y}});
    }
    if (const auto read = map.optional("read")) {
        layout.read = read->choice<RowRead>(
            {{"transfer", RowRead::transfer}, {"in_place", RowRead::in_place}});
    }
    const auto prescan = map.optional("prescan");
    const int prescan_ticks = prescan ? prescan->integer(0, kLargestSide) : 0;

    const YamlValue list = map.required("amplifiers");
    std::set<std::string> ids;
    for (const YamlValue& item : list.items(1, kMostAmplifiersOfLayout)) {
        const YamlMapping entry = item.mapping({"id", "section", "corner", "suffix"});
        Amplifier amplifier;
        amplifier.id = read_identifier(entry.required("id"));
        if (!ids.insert(upper_case(amplifier.id)).second) {
            entry.required("id").refuse("an id of its own (upper and lower case are one)");
        }
        const PixelBox section =
            read_section(entry.required("section"), layout.width, layout.height);
        const Corner corner =
            entry.required("corner").choice<Corner>({{"lower_left", Corner::lower_left},
                                                     {"lower_right", Corner::lower_right},
                                                     {"upper_left", Corner::upper_left},
                                                     {"upper_right", Corner::upper_right}});
        amplifier.readout = ReadoutGeometry(section, corner, layout.serial, prescan_ticks);
        if (const auto suffix = entry.optional("suffix")) {
            amplifier.suffix = read_identifier(*suffix);
        }
        layout.amplifiers.push_back(std::move(amplifier));
    }
    require_tiling(list, layout);
    return layout;
}

/// What one detector says of single amplifiers: {a03: {status: dead}}.
void read_exceptions(const YamlValue& value, Detector& detector) {
    for (const auto& [id, entry] : value.entries(1, kMostAmplifiersOfLayout)) {
        const auto found = std::find_if(detector.amplifiers.begin(), detector.amplifiers.end(),
                                        [&id = id](const Amplifier& a) { return a.id == id; });
        if (found == detector.amplifiers.end()) {
            entry.refuse("an amplifier of this detector's layout", "",
                         fmt::format("unknown amplifier '{}'", id));
        }
        const YamlMapping map = entry.mapping({"clock", "status"});
        if (const auto clock = map.optional("clock")) {
            found->clock = read_identifier(*clock);
        }
        if (const auto status = map.optional("status")) {
            found->status = status->choice<AmplifierStatus>(
                {{"live", AmplifierStatus::live}, {"dead", AmplifierStatus::dead}});
        }
    }
}

Detector read_detector(const YamlValue& value, const std::map<std::string, Layout>& layouts) {
    const YamlMapping map = value.mapping({"id", "layout", "centre_mm", "rotation_deg", "flip",
                                           "clock", "board", "role", "amplifiers"});
    Detector detector;
    detector.id = read_identifier(map.required("id"));
    const YamlValue layout_name = map.required("layout");
    const auto layout = layouts.find(layout_name.text(kLongestName));
    if (layout == layouts.end()) {
        layout_name.refuse("a name under `layouts`");
    }
    detector.width = layout->second.width;
    detector.height = layout->second.height;
    detector.serial = layout->second.serial;
    detector.read = layout->second.read;
    detector.amplifiers = layout->second.amplifiers;

    const std::vector<YamlValue> centre = map.required("centre_mm").items(2, 2);
    detector.centre = {centre[0].number(kPlace), centre[1].number(kPlace)};
    if (const auto rotation = map.optional("rotation_deg")) {
        detector.rotation_deg = rotation->number(kAngle);
    }
    if (const auto flip = map.optional("flip")) {
        detector.flip = flip->boolean();
    }
    const std::string clock = read_identifier(map.required("clock"));
    for (Amplifier& amplifier : detector.amplifiers) {
        amplifier.clock = clock;
    }
    const auto board = map.optional("board");
    detector.board = board ? read_identifier(*board) : detector.id;
    if (const auto role = map.optional("role")) {
        detector.role = role->choice<DetectorRole>(
            {{"science", DetectorRole::science}, {"guide", DetectorRole::guide}});
    }
    if (const auto amplifiers = map.optional("amplifiers")) {
        read_exceptions(*amplifiers, detector);
    }
    return detector;
}

/// Detectors become HDUs of the mask file: unique names, not those of its tables.
void require_free_name(const YamlValue& value, const std::string& id,
                       std::set<std::string>& taken) {
    static constexpr std::array<std::string_view, 5> kTables{"PRIMARY", "BITS", "MARKS",
                                                             "DETECTION", "ASSESSED"};
    const std::string name = upper_case(id);
    if (std::find(kTables.begin(), kTables.end(), name) != kTables.end()) {
        value.refuse("a name that no table of the mask file has",
                     fmt::format("not one of: {}", fmt::join(kTables, ", ")),
                     fmt::format("detector '{}'", id));
    }
    if (!taken.insert(name).second) {
        value.refuse("an id of its own (upper and lower case are one)", "",
                     fmt::format("detector '{}' a second time", id));
    }
}

}  // namespace

std::string read_identifier(const YamlValue& value) {
    constexpr std::size_t kLongest = 32;
    const std::string text = value.text(kLongest);
    const bool plain = std::all_of(text.begin(), text.end(), [](unsigned char c) {
        return (c >= '0' && c <= '9') || (c >= 'A' && c <= 'Z') || (c >= 'a' && c <= 'z') ||
               c == '_' || c == '.' || c == '+' || c == '-';
    });
    if (!plain) {
        value.refuse("letters, digits and _ . + - only");
    }
    return text;
}

std::vector<Detector> read_detectors(const YamlValue& layouts, const YamlValue& detectors) {
    std::map<std::string, Layout> layout_of;
    for (const auto& [name, value] : layouts.entries(1, kMostLayouts)) {
        layout_of.emplace(name, read_layout(value));
    }
    std::vector<Detector> read;
    std::set<std::string> names;
    std::size_t amplifiers = 0;
    for (const YamlValue& value : detectors.items(1, kMostDetectors)) {
        Detector detector = read_detector(value, layout_of);
        require_free_name(value, detector.id, names);
        amplifiers += detector.amplifiers.size();
        if (amplifiers > kMostAmplifiers) {
            value.refuse(fmt::format("at most {} amplifiers in all", kMostAmplifiers), "",
                         fmt::format("{} amplifiers up to here", amplifiers));
        }
        read.push_back(std::move(detector));
    }
    return read;
}

}  // namespace straymark::io
