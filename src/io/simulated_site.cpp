#include "io/simulated_site.h"

#include <algorithm>
#include <cmath>
#include <fmt/format.h>
#include <iterator>

namespace straymark::io {
namespace {

using simulate::Channel;
using simulate::ChannelPlan;
using simulate::Characterisation;
using simulate::DetectorPlan;
using simulate::LayoutPlan;
using simulate::PairMeasurement;
using simulate::Scenario;
using simulate::TelescopePlan;
using simulate::Vec2;
using simulate::World;

/// A text in YAML's double quotes.
std::string quoted(const std::string& text) {
    std::string out = "\"";
    for (const char c : text) {
        if (c == '"' || c == '\\') {
            out += '\\';
        }
        out += c;
    }
    return out + '"';
}

void append_telescope(const Scenario& scenario, std::string& text) {
    const TelescopePlan& telescope = scenario.telescope;
    fmt::format_to(std::back_inserter(text),
                   "telescope:\n"
                   "  mount: altaz\n"
                   "  derotated: true\n"
                   "  aperture_mm: {}\n"
                   "  obstruction_mm: {}\n"
                   "  focal_length_mm: {}\n",
                   telescope.aperture_mm, telescope.obstruction_mm, telescope.focal_length_mm);
    if (!telescope.struts.empty()) {
        text += "  struts:\n";
    }
    for (const simulate::StrutPlan& strut : telescope.struts) {
        fmt::format_to(std::back_inserter(text),
                       "    - {{angle_deg: {}, width_mm: {}, inner_mm: {}, outer_mm: {}}}\n",
                       strut.angle_deg, strut.width_mm, strut.inner_mm, strut.outer_mm);
    }
    fmt::format_to(std::back_inserter(text),
                   "focal_plane:\n"
                   "  pixel_um: {}\n"
                   "  parity: {}\n"
                   "  camera_angle_deg: {{keyword: CAMANG, sign: 1, zero: 0}}\n"
                   "  distortion: [{}, {}]\n",
                   scenario.silicon.pixel_um, telescope.mirrored ? -1 : 1,
                   telescope.stretch_third_order, telescope.stretch_fifth_order);
    text += "filters:\n";
    for (const auto& [name, filter] : scenario.filters) {
        fmt::format_to(
            std::back_inserter(text),
            "  {}: {{wavelength_nm: {}, width_nm: {}, zero_point: {}, extinction: {}}}\n",
            quoted(name), filter.wavelength_nm, filter.width_nm, filter.zero_point,
            filter.extinction);
    }
}

/// The section's box and the corner at which the node lies.
std::string amplifier_line(const ChannelPlan& plan) {
    const int far_x =
        plan.node_x + (plan.ticks - 1) * plan.serial.dx + (plan.rows - 1) * plan.parallel.dx;
    const int far_y =
        plan.node_y + (plan.ticks - 1) * plan.serial.dy + (plan.rows - 1) * plan.parallel.dy;
    return fmt::format("      - {{id: {}, section: [{}, {}, {}, {}], corner: {}_{}}}\n",
                       quoted(plan.id), std::min(plan.node_x, far_x) + 1,
                       std::max(plan.node_x, far_x) + 1, std::min(plan.node_y, far_y) + 1,
                       std::max(plan.node_y, far_y) + 1,
                       plan.serial.dy + plan.parallel.dy > 0 ? "lower" : "upper",
                       plan.serial.dx + plan.parallel.dx > 0 ? "left" : "right");
}

void append_layouts(const Scenario& scenario, std::string& text) {
    text += "layouts:\n";
    for (const LayoutPlan& layout : scenario.layouts) {
        fmt::format_to(std::back_inserter(text),
                       "  {}:\n"
                       "    size: [{}, {}]\n"
                       "    prescan: {}\n"
                       "    serial: {}\n"
                       "    read: transfer\n"
                       "    amplifiers:\n",
                       quoted(layout.name), layout.width, layout.height, layout.prescan_ticks,
                       layout.channels.front().serial.dx != 0 ? "x" : "y");
        for (const ChannelPlan& plan : layout.channels) {
            text += amplifier_line(plan);
        }
    }
}

/// The turn and flip that the camera file speaks of: rows grow along +y turned by the rotation,
/// columns along +x turned likewise, or against it where flipped.
void append_detectors(const Scenario& scenario, std::string& text) {
    text += "detectors:\n";
    for (const DetectorPlan& detector : scenario.detectors) {
        const Vec2 rows = detector.row_vector;
        const double rotation_deg = simulate::degrees(std::atan2(-rows.x, rows.y));
        const Vec2 right_of_rows{rows.y, -rows.x};
        const bool flip = dot(detector.column_vector, right_of_rows) < 0.0;
        fmt::format_to(std::back_inserter(text),
                       "  - {{id: {}, layout: {}, centre_mm: [{}, {}], rotation_deg: {}, flip: {},"
                       " clock: {}, board: {}, role: science}}\n",
                       quoted(detector.id), quoted(scenario.layouts[detector.layout].name),
                       detector.centre_mm.x, detector.centre_mm.y,
                       rotation_deg == 0.0 ? 0.0 : rotation_deg, flip, quoted(detector.clock),
                       quoted(detector.board));
    }
}

bool any_delayed(const Characterisation& known) {
    return std::any_of(known.pairs.begin(), known.pairs.end(),
                       [](const PairMeasurement& pair) { return pair.delay_ticks != 0; });
}

bool all_serial_along_x(const Scenario& scenario) {
    return std::all_of(
        scenario.layouts.begin(), scenario.layouts.end(),
        [](const LayoutPlan& layout) { return layout.channels.front().serial.dx != 0; });
}

}  // namespace

std::string simulated_camera_file(const World& world, const Characterisation& known) {
    const Scenario& scenario = world.scenario;
    std::string text = fmt::format(
        "# The camera of a simulated night; written by `straymark simulate`.\n"
        "format: straymark-camera/1\n"
        "name: {}\n"
        "observatory: {{latitude_deg: {}, longitude_deg: {}, height_m: {}}}\n",
        quoted(scenario.name), scenario.site.latitude_deg, scenario.site.longitude_deg,
        scenario.site.height_m);
    append_telescope(scenario, text);
    append_layouts(scenario, text);
    append_detectors(scenario, text);
    fmt::format_to(std::back_inserter(text), "amplifier_table: {}\n",
                   quoted(scenario.name + "_amplifiers.csv"));
    if (any_delayed(known)) {
        fmt::format_to(std::back_inserter(text), "pair_table: {}\n",
                       quoted(scenario.name + "_pairs.csv"));
    }
    fmt::format_to(std::back_inserter(text), "readout_s: {}\n", scenario.readout_s);
    text +=
        "types: {sky: [OBJECT], dark: [DARK], flat: [FLAT], focus: [FOCUS]}\n"
        "headers: {id: OBS_ID, sequence: RUNSEQ, type: IMAGETYP, start: MJD-OBS, end: MJD-END,\n"
        "          exposure: EXPTIME, clear: MJD-CLR, readout_end: MJD-RD, filter: FILTER,\n"
        "          ra: RA, dec: DEC, temperature: CCDTEMP}\n";
    fmt::format_to(std::back_inserter(text),
                   "raw: {{hdu: \"{{detector}}_{{amplifier}}\", data: DATASEC, bias: BIASSEC,"
                   " prescan: PRESEC,\n      {}order: readout}}\n",
                   all_serial_along_x(scenario) ? "detector_section: DETSEC, " : "");
    return text;
}

std::string simulated_amplifier_table(const World& world) {
    std::string text = "detector,amplifier,gain,read_noise,saturation,full_well\n";
    for (int c = 0; c < static_cast<int>(world.instrument.channels.size()); ++c) {
        const Channel& channel = world.instrument.channels[c];
        const auto slash = channel.name.find('/');
        fmt::format_to(std::back_inserter(text), "{},{},{:.6f},{:.4f},{:.0f},{:.0f}\n",
                       channel.name.substr(0, slash), channel.name.substr(slash + 1),
                       channel.gain_e_per_adu, channel.read_noise_e,
                       simulate::saturation_adu(world.scenario, world.instrument, c),
                       world.instrument.chips[channel.detector].full_well_e);
    }
    return text;
}

std::string simulated_pair_table(const World& world, const Characterisation& known) {
    if (!any_delayed(known)) {
        return {};
    }
    std::string text = "source,victim,offset\n";
    for (const PairMeasurement& pair : known.pairs) {
        if (pair.delay_ticks != 0) {
            fmt::format_to(std::back_inserter(text), "{},{},{}\n",
                           world.instrument.channels[pair.source].name,
                           world.instrument.channels[pair.victim].name, pair.delay_ticks);
        }
    }
    return text;
}

std::string simulated_site_file(const World& world, const std::string& calibrations) {
    return fmt::format(
        "# The site of a simulated night; written by `straymark simulate`.\n"
        "format: straymark-site/1\n"
        "camera: {}\n"
        "calibrations: {}\n"
        "stars: stars.fits   # straymark stars import stars.csv --out stars.fits\n"
        "history: history.sqlite\n"
        "masks: masks/\n"
        "digests: digests/\n"
        "accept: {{unassessed_fraction: 0.02}}\n",
        quoted(world.scenario.name + ".yaml"), calibrations);
}

}  // namespace straymark::io
