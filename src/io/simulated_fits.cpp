#include "io/simulated_fits.h"

#include <cmath>
#include <cstdint>
#include <fmt/format.h>
#include <limits>
#include <span>
#include <vector>

#include "core/parallel.h"
#include "io/byte_order.h"
#include "io/compressed_image.h"
#include "io/fits_writer.h"

namespace straymark::io {
namespace {

using simulate::Channel;
using simulate::ChannelPlan;
using simulate::Chip;
using simulate::Echo;
using simulate::ExposureKind;
using simulate::Scenario;
using simulate::SimulatedExposure;
using simulate::World;

// The smallest echo that is kept, and the accuracy to which one is: parts of an electron that no
// rule could notice, and that would only make the file large.
constexpr float kSmallestEcho_e = 1e-3F;
constexpr std::uint32_t kMantissaKept = 0xFFFFFE00U;  // 14 bits: 3e-5 of the value

std::string_view type_of(ExposureKind kind) {
    switch (kind) {
        case ExposureKind::dark:
            return "DARK";
        case ExposureKind::flat:
            return "FLAT";
        case ExposureKind::focus:
            return "FOCUS";
        case ExposureKind::sky:
            break;
    }
    return "OBJECT";
}

const ChannelPlan& plan_of(const Scenario& scenario, const Channel& channel) {
    return scenario.layouts[scenario.detectors[channel.detector].layout].channels[channel.number];
}

/// Degrees as a telescope writes them: to 0.04 milliarcseconds.
double rounded(double value_deg) {
    return std::nearbyint(value_deg * 1e8) / 1e8;
}

HeaderCards exposure_cards(const SimulatedExposure& exposure) {
    HeaderCards cards;
    cards.add_text("OBS_ID", exposure.plan.id);
    cards.add_integer("RUNSEQ", exposure.number, "in the night");
    cards.add_text("IMAGETYP", type_of(exposure.plan.kind));
    cards.add_text("TIMESYS", "UTC");
    cards.add_real("MJD-CLR", exposure.instants.clear, "end of the last clear");
    cards.add_real("MJD-OBS", exposure.instants.start, "shutter opens");
    cards.add_real("MJD-END", exposure.instants.end, "shutter closes");
    cards.add_real("MJD-RD", exposure.instants.readout_end, "end of read-out");
    cards.add_real("EXPTIME", exposure.plan.exposure_s, "[s]");
    cards.add_text("FILTER", exposure.plan.filter);
    cards.add_real("RA", rounded(exposure.pointing.header.ra_deg), "[deg] ICRS, asked for");
    cards.add_real("DEC", rounded(exposure.pointing.header.dec_deg), "[deg] ICRS, asked for");
    cards.add_real("CAMANG", exposure.pointing.header_camera_angle_deg, "[deg] camera angle");
    cards.add_real("CCDTEMP", -100.0, "[deg C]");
    return cards;
}

HeaderCards image_cards(int bits, int width, int height) {
    HeaderCards cards;
    cards.add_text("XTENSION", "IMAGE");
    cards.add_integer("BITPIX", bits);
    cards.add_integer("NAXIS", 2);
    cards.add_integer("NAXIS1", width);
    cards.add_integer("NAXIS2", height);
    cards.add_integer("PCOUNT", 0);
    cards.add_integer("GCOUNT", 1);
    return cards;
}

/// Where a channel's pixels lie on its detector; a reversed range: they come in that order. Only
/// for rows that are shifted out along x.
std::string detector_section(const ChannelPlan& plan) {
    const int x = plan.node_x + 1;
    const int y = plan.node_y + 1;
    return fmt::format("[{}:{},{}:{}]", x, x + (plan.ticks - 1) * plan.serial.dx, y,
                       y + (plan.rows - 1) * plan.parallel.dy);
}

FitsUnit raw_unit(const World& world, int number, const std::vector<std::uint16_t>& raw) {
    const Channel& channel = world.instrument.channels[number];
    const ChannelPlan& plan = plan_of(world.scenario, channel);
    const int first = channel.prescan + 1;
    const int last = channel.prescan + channel.ticks;
    HeaderCards cards = image_cards(16, channel.ticks_in_row(), channel.rows);
    cards.add_integer("BZERO", 32768, "unsigned 16-bit values");
    cards.add_integer("BSCALE", 1);
    cards.add_text("EXTNAME", world.instrument.chips[channel.detector].id + "_" + plan.id);
    cards.add_text("BUNIT", "adu");
    cards.add_text("DATASEC", fmt::format("[{}:{},1:{}]", first, last, channel.rows));
    cards.add_text("BIASSEC",
                   fmt::format("[{}:{},1:{}]", last + 1, channel.ticks_in_row(), channel.rows));
    if (channel.prescan > 0) {
        cards.add_text("PRESEC", fmt::format("[1:{},1:{}]", channel.prescan, channel.rows));
    }
    if (plan.serial.dx != 0) {
        cards.add_text("DETSEC", detector_section(plan));
    }
    std::vector<std::byte> data(2 * raw.size());
    for (std::size_t i = 0; i < raw.size(); ++i) {
        // Less 32768, modulo 65536.
        store_big_endian(data.data() + 2 * i, static_cast<std::uint16_t>(raw[i] ^ 0x8000U));
    }
    return finished_unit(std::move(cards), std::move(data));
}

/// Small values dropped and the rest cut to the bits that are kept.
void trim(std::span<float> pixels) {
    for (float& pixel : pixels) {
        if (std::fabs(pixel) < kSmallestEcho_e) {
            pixel = 0.0F;
        } else {
            pixel = std::bit_cast<float>(std::bit_cast<std::uint32_t>(pixel) & kMantissaKept);
        }
    }
}

FitsUnit spread_unit(const std::string& detector, const std::vector<double>& values) {
    HeaderCards cards = image_cards(-64, simulate::kSpreadSide, simulate::kSpreadSide);
    cards.add_text("EXTNAME", detector + ".psf");
    std::vector<std::byte> data(values.size() * sizeof(double));
    for (std::size_t i = 0; i < values.size(); ++i) {
        store_big_endian(data.data() + i * sizeof(double), values[i]);
    }
    return finished_unit(std::move(cards), std::move(data));
}

FitsUnit amplifiers_unit(const World& world, const SimulatedExposure& exposure) {
    std::vector<std::string> detector;
    std::vector<std::string> amplifier;
    std::vector<std::int32_t> x1;
    std::vector<std::int32_t> x2;
    std::vector<std::int32_t> y1;
    std::vector<std::int32_t> y2;
    std::vector<double> gain;
    std::vector<double> bias;
    for (const Channel& channel : world.instrument.channels) {
        const ChannelPlan& plan = plan_of(world.scenario, channel);
        const int far_x =
            plan.node_x + (plan.ticks - 1) * plan.serial.dx + (plan.rows - 1) * plan.parallel.dx;
        const int far_y =
            plan.node_y + (plan.ticks - 1) * plan.serial.dy + (plan.rows - 1) * plan.parallel.dy;
        detector.push_back(world.instrument.chips[channel.detector].id);
        amplifier.push_back(plan.id);
        x1.push_back(std::min(plan.node_x, far_x) + 1);
        x2.push_back(std::max(plan.node_x, far_x) + 1);
        y1.push_back(std::min(plan.node_y, far_y) + 1);
        y2.push_back(std::max(plan.node_y, far_y) + 1);
        gain.push_back(channel.gain_e_per_adu);
        bias.push_back(channel.bias_adu);
    }
    return table_unit("AMPLIFIERS", {{"detector", "", detector},
                                     {"amplifier", "", amplifier},
                                     {"x1", "pixel", x1},
                                     {"x2", "pixel", x2},
                                     {"y1", "pixel", y1},
                                     {"y2", "pixel", y2},
                                     {"gain", "electron/adu", gain},
                                     {"noise_e", "electron", exposure.truth.noise_e},
                                     {"bias_adu", "adu", bias}});
}

FitsUnit echoes_unit(const World& world, const std::vector<Echo>& echoes) {
    std::vector<std::string> victim;
    std::vector<std::string> source;
    std::vector<double> x;
    std::vector<double> y;
    std::vector<double> source_x;
    std::vector<double> source_y;
    std::vector<double> total;
    std::vector<double> peak;
    for (const Echo& echo : echoes) {
        victim.push_back(world.instrument.channels[echo.victim].name);
        source.push_back(world.instrument.channels[echo.source].name);
        x.push_back(echo.crest_x + 1.0);
        y.push_back(echo.crest_y + 1.0);
        source_x.push_back(echo.source_pixel.x + 1.0);
        source_y.push_back(echo.source_pixel.y + 1.0);
        total.push_back(echo.total_e);
        peak.push_back(echo.peak_e);
    }
    return table_unit("ECHOES", {{"victim", "", victim},
                                 {"source", "", source},
                                 {"x", "pixel", x},
                                 {"y", "pixel", y},
                                 {"source_x", "pixel", source_x},
                                 {"source_y", "pixel", source_y},
                                 {"total_e", "electron", total},
                                 {"peak_e", "electron", peak}});
}

}  // namespace

void write_simulated_raw(const std::string& path, const World& world,
                         const SimulatedExposure& exposure) {
    std::vector<FitsUnit> units(exposure.raw.size());
    for (int c = 0; c < static_cast<int>(units.size()); ++c) {
        units[c] = raw_unit(world, c, exposure.raw[c]);
    }
    write_fits(path, exposure_cards(exposure), units);
}

void write_simulated_truth(const std::string& path, const World& world,
                           const SimulatedExposure& exposure, int threads) {
    const std::vector<Chip>& chips = world.instrument.chips;
    std::vector<FitsUnit> units(2 * chips.size());
    parallel_for(static_cast<int>(chips.size()), threads, [&](int d) {
        simulate::Image image = exposure.truth.crosstalk_e[d];
        trim(image);
        const std::size_t at = 2 * static_cast<std::size_t>(d);
        units[at] = compressed_float_unit(chips[d].id + ".crosstalk", image, chips[d].width,
                                          chips[d].height, "electron");
        units[at + 1] = spread_unit(chips[d].id, exposure.truth.spread[d]);
    });
    units.push_back(amplifiers_unit(world, exposure));
    units.push_back(echoes_unit(world, exposure.truth.echoes));
    HeaderCards cards;
    cards.add_text("FORMAT", "straymark-truth/1");
    cards.add_text("OBS_ID", exposure.plan.id);
    write_fits(path, cards, units);
}

}  // namespace straymark::io
