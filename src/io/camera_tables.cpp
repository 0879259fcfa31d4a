#include "io/camera_tables.h"

#include <fmt/format.h>
#include <map>
#include <set>

#include "core/error.h"
#include "io/csv.h"

namespace straymark::io {
namespace {

constexpr double kHighestGain = 1e4;        // e/ADU
constexpr double kHighestReadNoise = 1e5;   // e
constexpr double kHighestSaturation = 5e9;  // ADU, above any 32-bit converter
constexpr double kHighestFullWell = 1e9;    // e
constexpr int kLargestOffset = 10000;       // ticks
constexpr std::size_t kMostPairs = 1000000;

/// (detector id, amplifier id) -> place; a linear search for each row would be quadratic.
using AmplifierIndex = std::map<std::string, AmplifierRef, std::less<>>;

AmplifierIndex index_of(const Camera& camera) {
    AmplifierIndex index;
    for (std::size_t d = 0; d < camera.detectors.size(); ++d) {
        for (std::size_t a = 0; a < camera.detectors[d].amplifiers.size(); ++a) {
            const AmplifierRef ref{static_cast<int>(d), static_cast<int>(a)};
            index.emplace(camera.amplifier_name(ref), ref);
        }
    }
    return index;
}

Amplifier& amplifier_at(Camera& camera, AmplifierRef ref) {
    return camera.detectors[static_cast<std::size_t>(ref.detector)]
        .amplifiers[static_cast<std::size_t>(ref.amplifier)];
}

double number_in(const CsvReader& table, int column, double least, double most, bool least_excluded,
                 const std::string& unit) {
    const double value = table.number(column);
    if (value > most || value < least || (least_excluded && value == least)) {
        table.refuse(column,
                     fmt::format("a number {} {} and at most {} {}",
                                 least_excluded ? "above" : "of at least", least, most, unit));
    }
    return value;
}

void refuse_unknown_columns(const CsvReader& table, const std::string& path,
                            const std::set<std::string>& known) {
    for (const std::string& column : table.columns()) {
        if (!known.contains(column) && !column.starts_with("x_")) {
            throw InputError({path, "header row", fmt::format("unknown column '{}'", column),
                              fmt::format("only {}", fmt::join(known, ", ")),
                              "a column of your own must begin with x_"});
        }
    }
}

}  // namespace

void read_amplifier_table(const std::string& path, Camera& camera) {
    CsvReader table(path);
    refuse_unknown_columns(
        table, path, {"detector", "amplifier", "gain", "read_noise", "saturation", "full_well"});
    const int detector = table.required_column("detector");
    const int amplifier = table.required_column("amplifier");
    const int gain = table.required_column("gain");
    const int read_noise = table.required_column("read_noise");
    const int saturation = table.required_column("saturation");
    const std::optional<int> full_well = table.column("full_well");

    const AmplifierIndex index = index_of(camera);
    std::map<AmplifierRef, int> line_of;
    while (table.next()) {
        const auto found =
            index.find(fmt::format("{}/{}", table.field(detector), table.field(amplifier)));
        if (found == index.end()) {
            const bool known =
                camera.detector_index(std::string(table.field(detector))).has_value();
            table.refuse(known ? amplifier : detector,
                         fmt::format("{} of the camera file",
                                     known ? "an amplifier of that detector" : "a detector"));
        }
        const auto [place, first] = line_of.emplace(found->second, table.line());
        if (!first) {
            table.refuse(amplifier,
                         fmt::format("each amplifier once ({} stands in line {} already)",
                                     found->first, place->second));
        }
        Amplifier& target = amplifier_at(camera, found->second);
        target.gain_e_per_adu = number_in(table, gain, 0.0, kHighestGain, true, "e/ADU");
        target.read_noise_e = number_in(table, read_noise, 0.0, kHighestReadNoise, false, "e");
        target.saturation_adu = number_in(table, saturation, 0.0, kHighestSaturation, true, "ADU");
        if (full_well && !table.field(*full_well).empty()) {
            target.full_well_e = number_in(table, *full_well, 0.0, kHighestFullWell, true, "e");
        }
    }
    for (const auto& [name, ref] : index) {
        if (!line_of.contains(ref)) {
            throw InputError({path, "", fmt::format("no row for amplifier {}", name),
                              "one row for each amplifier of the camera file", "add the row"});
        }
    }
}

void read_pair_table(const std::string& path, Camera& camera) {
    CsvReader table(path);
    refuse_unknown_columns(table, path, {"source", "victim", "offset"});
    const int source = table.required_column("source");
    const int victim = table.required_column("victim");
    const int offset = table.required_column("offset");

    const AmplifierIndex index = index_of(camera);
    const auto amplifier_in = [&](int column) {
        const auto found = index.find(table.field(column));
        if (found == index.end()) {
            table.refuse(column, "DETECTOR/AMPLIFIER of the camera file");
        }
        return found->second;
    };
    while (table.next()) {
        if (camera.pair_offset_ticks.size() == kMostPairs) {
            throw InputError({path, fmt::format("line {}", table.line()),
                              fmt::format("over {} pairs", kMostPairs), "a shorter table",
                              "leave out pairs of offset 0"});
        }
        const AmplifierRef from = amplifier_in(source);
        const AmplifierRef to = amplifier_in(victim);
        if (from == to) {
            table.refuse(victim, "another amplifier than the source");
        }
        if (camera.amplifier(from).clock != camera.amplifier(to).clock) {
            table.refuse(victim, fmt::format("an amplifier on the source's clock '{}'",
                                             camera.amplifier(from).clock));
        }
        const int ticks = table.integer(offset);
        if (ticks < -kLargestOffset || ticks > kLargestOffset) {
            table.refuse(offset, fmt::format("{} to {} ticks", -kLargestOffset, kLargestOffset));
        }
        if (!camera.pair_offset_ticks.emplace(std::pair(from, to), ticks).second) {
            table.refuse(source, "each pair once");
        }
    }
}

}  // namespace straymark::io
