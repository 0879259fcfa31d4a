#include "io/scenario_file.h"

#include <algorithm>
#include <fmt/format.h>
#include <set>

#include "core/error.h"
#include "io/csv.h"
#include "io/files.h"
#include "io/scenario_camera.h"
#include "io/yaml.h"

namespace straymark::io {
namespace {

using simulate::AmplifierPlan;
using simulate::CouplingPlan;
using simulate::ExposureKind;
using simulate::ExposurePlan;
using simulate::FieldPlan;
using simulate::FilterPlan;
using simulate::Range;
using simulate::Scenario;
using simulate::SeeingPlan;
using simulate::SiliconPlan;
using simulate::SitePlan;
using simulate::StarListPlan;
using simulate::StratumPlan;
using simulate::TelescopePlan;

constexpr NumberRange kAngle{-360.0, 360.0, "deg"};
constexpr NumberRange kFraction{0.0, 1.0};
constexpr NumberRange kMagnitude{-30.0, 40.0};
constexpr NumberRange kDuration{0.0, 1e5, "s"};
constexpr std::size_t kMostExposures = 10000;
constexpr std::size_t kLongestId = 40;
constexpr double kMostStarsInField = 2e7;

Range read_range(const YamlValue& value, const NumberRange& within) {
    const std::vector<YamlValue> items = value.items(2, 2);
    const Range range{items[0].number(within), items[1].number(within)};
    if (range.high < range.low) {
        value.refuse("[low, high] with low at most high");
    }
    return range;
}

SitePlan read_site(const YamlValue& value) {
    const YamlMapping map = value.mapping({"latitude_deg", "longitude_deg", "height_m"});
    return {map.required("latitude_deg").number({-90.0, 90.0, "deg"}),
            map.required("longitude_deg").number({-180.0, 360.0, "deg"}),
            map.required("height_m").number({-500.0, 10000.0, "m"})};
}

TelescopePlan read_telescope(const YamlValue& value) {
    const YamlMapping map =
        value.mapping({"focal_length_mm", "aperture_mm", "obstruction_mm", "mirrored", "stretch",
                       "pointing_error_arcsec", "camera_angle_error_deg", "struts"});
    TelescopePlan telescope;
    telescope.focal_length_mm = map.required("focal_length_mm").number({50.0, 1e6, "mm"});
    telescope.aperture_mm = map.required("aperture_mm").number({10.0, 1e5, "mm"});
    telescope.obstruction_mm =
        map.required("obstruction_mm").number({0.0, telescope.aperture_mm, "mm"});
    telescope.mirrored = map.required("mirrored").boolean();
    const std::vector<YamlValue> stretch = map.required("stretch").items(2, 2);
    telescope.stretch_third_order = stretch[0].number({-1e6, 1e6});
    telescope.stretch_fifth_order = stretch[1].number({-1e12, 1e12});
    telescope.pointing_error_arcsec =
        map.required("pointing_error_arcsec").number({0.0, 3600.0, "arcsec"});
    telescope.camera_angle_error_deg =
        map.required("camera_angle_error_deg").number({0.0, 10.0, "deg"});
    for (const YamlValue& item : map.required("struts").items(0, 64)) {
        const YamlMapping strut = item.mapping({"angle_deg", "width_mm", "inner_mm", "outer_mm"});
        const NumberRange length{0.0, 1e5, "mm"};
        telescope.struts.push_back(
            {strut.required("angle_deg").number(kAngle), strut.required("width_mm").number(length),
             strut.required("inner_mm").number(length), strut.required("outer_mm").number(length)});
    }
    return telescope;
}

FilterPlan read_filter(const YamlValue& value) {
    const YamlMapping map =
        value.mapping({"wavelength_nm", "width_nm", "zero_point", "extinction"});
    return {map.required("wavelength_nm").number({100.0, 30000.0, "nm"}),
            map.required("width_nm").number({1.0, 30000.0, "nm"}),
            map.required("zero_point").number({0.0, 40.0}),
            map.required("extinction").number({0.0, 5.0})};
}

SeeingPlan read_seeing(const YamlValue& value) {
    const YamlMapping map = value.mapping({"moffat_beta", "ellipticity", "axis_deg"});
    return {map.required("moffat_beta").number({1.5, 20.0}),
            map.required("ellipticity").number({0.0, 0.5}),
            map.required("axis_deg").number(kAngle)};
}

SiliconPlan read_silicon(const YamlValue& value) {
    const YamlMapping map =
        value.mapping({"pixel_um", "full_well_e", "pixel_response", "cosmic_rays_per_cm2_s"});
    return {map.required("pixel_um").number({0.5, 500.0, "um"}),
            read_range(map.required("full_well_e"), {100.0, 1e8}),
            map.required("pixel_response").number({0.0, 0.2}),
            map.required("cosmic_rays_per_cm2_s").number({0.0, 100.0})};
}

AmplifierPlan read_amplifiers(const YamlValue& value) {
    const YamlMapping map = value.mapping(
        {"gain_e_per_adu", "read_noise_e", "bias_adu", "bias_drift_adu", "converter_max_adu"});
    return {read_range(map.required("gain_e_per_adu"), {0.01, 1e4}),
            read_range(map.required("read_noise_e"), {0.0, 1e4}),
            read_range(map.required("bias_adu"), {0.0, 60000.0}),
            map.required("bias_drift_adu").number({0.0, 1000.0}),
            map.required("converter_max_adu").integer(255, 65535)};
}

StratumPlan read_stratum(const YamlValue& value) {
    const YamlMapping map =
        value.mapping({"strength", "fall_per_channel", "negative_fraction", "zero_fraction"});
    StratumPlan stratum;
    stratum.strength = read_range(map.required("strength"), {1e-12, 0.1});
    if (const auto fall = map.optional("fall_per_channel")) {
        stratum.fall_per_channel = fall->number({0.0, 1.0});
    }
    stratum.negative_fraction = map.required("negative_fraction").number(kFraction);
    stratum.zero_fraction = map.required("zero_fraction").number(kFraction);
    return stratum;
}

CouplingPlan read_coupling(const YamlValue& value) {
    const YamlMapping map =
        value.mapping({"device", "board", "rest", "derivative", "tail", "delay", "bend"});
    CouplingPlan coupling;
    coupling.device = read_stratum(map.required("device"));
    coupling.board = read_stratum(map.required("board"));
    coupling.rest = read_stratum(map.required("rest"));
    const YamlMapping derivative = map.required("derivative").mapping({"fraction", "ratio"});
    coupling.derivative_fraction = derivative.required("fraction").number(kFraction);
    coupling.derivative_ratio = read_range(derivative.required("ratio"), {0.0, 10.0});
    const YamlMapping tail = map.required("tail").mapping({"fraction", "ratio", "decay"});
    coupling.tail_fraction = tail.required("fraction").number(kFraction);
    coupling.tail_ratio = read_range(tail.required("ratio"), {-1.0, 1.0});
    coupling.tail_decay = tail.required("decay").number({0.0, 0.9});
    const YamlMapping delay = map.required("delay").mapping({"fraction", "longest_ticks"});
    coupling.delayed_fraction = delay.required("fraction").number(kFraction);
    coupling.longest_delay_ticks = delay.required("longest_ticks").integer(1, 3);
    const YamlMapping bend =
        map.required("bend").mapping({"fraction", "ratio", "onset_adu", "width_adu"});
    coupling.bent_fraction = bend.required("fraction").number(kFraction);
    coupling.bend_ratio = read_range(bend.required("ratio"), {-2.0, 2.0});
    coupling.bend_onset_adu = read_range(bend.required("onset_adu"), {1000.0, 1e6});
    coupling.bend_width_adu = bend.required("width_adu").number({1.0, 1e6});
    return coupling;
}

StarListPlan read_star_list(const YamlValue& value) {
    const YamlMapping map = value.mapping(
        {"faintest_simulated", "faintest_listed", "position_error_arcsec", "magnitude_error"});
    return {map.required("faintest_simulated").number(kMagnitude),
            map.required("faintest_listed").number(kMagnitude),
            map.required("position_error_arcsec").number({0.0, 10.0, "arcsec"}),
            map.required("magnitude_error").number({0.0, 2.0})};
}

FieldPlan read_field(const std::string& name, const YamlValue& value, const Scenario& scenario) {
    const YamlMapping map = value.mapping(
        {"ra_deg", "dec_deg", "bright_stars", "bright_radius_deg", "radius_deg", "complete_to"});
    FieldPlan field;
    field.name = name;
    field.ra_deg = map.required("ra_deg").number({0.0, 360.0, "deg"});
    field.dec_deg = map.required("dec_deg").number({-89.0, 89.0, "deg"});
    field.stars = resolved_beside(scenario.path, map.required("bright_stars").text(4096));
    field.stars_radius_deg = map.required("bright_radius_deg").number({0.1, 60.0, "deg"});
    field.radius_deg = map.required("radius_deg").number({0.0, field.stars_radius_deg, "deg"});
    field.complete_mag = map.required("complete_to").number(kMagnitude);
    return field;
}

/// Index of the field that an exposure names.
int field_index(const YamlValue& value, const Scenario& scenario) {
    const std::string name = value.text(kLongestId);
    const auto found = std::find_if(scenario.fields.begin(), scenario.fields.end(),
                                    [&](const FieldPlan& field) { return field.name == name; });
    if (found == scenario.fields.end()) {
        value.refuse("a name under `fields`");
    }
    return static_cast<int>(found - scenario.fields.begin());
}

/// What only an exposure of the sky has.
void read_sky(const YamlMapping& map, const Scenario& scenario, ExposurePlan& exposure) {
    exposure.field = field_index(map.required("field"), scenario);
    const std::vector<YamlValue> offset = map.required("offset_arcsec").items(2, 2);
    const NumberRange reach{-36000.0, 36000.0, "arcsec"};
    exposure.offset_arcsec = {offset[0].number(reach), offset[1].number(reach)};
    exposure.camera_angle_deg = map.required("camera_angle_deg").number(kAngle);
    exposure.seeing_arcsec = map.required("seeing_arcsec").number({0.1, 30.0, "arcsec"});
    exposure.sky_mag_arcsec2 = map.required("sky_mag").number({5.0, 30.0});
    if (const auto transparency = map.optional("transparency")) {
        exposure.transparency = transparency->number({0.0, 1.0, "", true});
    }
}

ExposurePlan read_exposure(const YamlValue& value, const Scenario& scenario) {
    const YamlMapping map =
        value.mapping({"id", "kind", "mjd", "exposure_s", "filter", "field", "offset_arcsec",
                       "camera_angle_deg", "seeing_arcsec", "sky_mag", "transparency", "flat_e"});
    ExposurePlan exposure;
    const YamlValue id = map.required("id");
    exposure.id = id.text(kLongestId);
    if (exposure.id.find('/') != std::string::npos || exposure.id.front() == '.') {
        id.refuse("a name that can be a file's");
    }
    exposure.kind = map.required("kind").choice<ExposureKind>({{"sky", ExposureKind::sky},
                                                               {"dark", ExposureKind::dark},
                                                               {"flat", ExposureKind::flat},
                                                               {"focus", ExposureKind::focus}});
    exposure.mjd = map.required("mjd").number({40000.0, 100000.0});
    exposure.exposure_s = map.required("exposure_s").number(kDuration);
    const YamlValue filter = map.required("filter");
    exposure.filter = filter.text(kLongestId);
    if (!scenario.filters.contains(exposure.filter)) {
        filter.refuse("a name under `filters`");
    }
    if (exposure.kind == ExposureKind::sky || exposure.kind == ExposureKind::focus) {
        read_sky(map, scenario, exposure);
    }
    if (exposure.kind == ExposureKind::flat) {
        exposure.flat_e = map.required("flat_e").number({0.0, 1e7});
    }
    return exposure;
}

void read_exposures(const YamlValue& value, Scenario& scenario) {
    std::set<std::string> ids;
    for (const YamlValue& item : value.items(1, kMostExposures)) {
        scenario.exposures.push_back(read_exposure(item, scenario));
        const ExposurePlan& exposure = scenario.exposures.back();
        if (!ids.insert(exposure.id).second) {
            item.refuse("an id of its own", "", "exposure '" + exposure.id + "' a second time");
        }
        if (scenario.exposures.size() > 1 &&
            exposure.mjd <= scenario.exposures[scenario.exposures.size() - 2].mjd) {
            item.refuse("exposures in the order of time");
        }
    }
}

void require_bounded_fields(const YamlMapping& top, const Scenario& scenario) {
    constexpr double kSquareDegreesOfCap = 3.2;  // of radius 1 degree, generously
    const double density =
        simulate::stars_per_square_degree(scenario.star_list.faintest_simulated_mag);
    for (const FieldPlan& field : scenario.fields) {
        const double stars = density * kSquareDegreesOfCap * field.radius_deg * field.radius_deg;
        if (stars > kMostStarsInField) {
            top.required("stars").refuse(
                fmt::format("at most {:.0e} stars in a field", kMostStarsInField),
                "a brighter faintest_simulated or a smaller radius_deg",
                fmt::format("some {:.1e} stars in field '{}'", stars, field.name));
        }
    }
}

}  // namespace

Scenario read_scenario(const std::string& path) {
    const YamlFile file(path);
    file.require_format("straymark-scenario", 1);
    const YamlMapping top =
        file.root().mapping({"format", "camera", "seed", "site", "telescope", "filters", "seeing",
                             "silicon", "amplifiers", "coupling", "characterisation", "timing",
                             "layouts", "detectors", "stars", "fields", "exposures"});
    Scenario scenario;
    scenario.path = path;
    const YamlValue camera = top.required("camera");
    scenario.name = camera.text(kLongestId);
    if (scenario.name.find('/') != std::string::npos || scenario.name.front() == '.') {
        camera.refuse("a name that can be a file's");
    }
    scenario.seed = static_cast<std::uint64_t>(top.required("seed").integer(0, 2147483647));
    scenario.site = read_site(top.required("site"));
    scenario.telescope = read_telescope(top.required("telescope"));
    for (const auto& [name, value] : top.required("filters").entries(1, 64)) {
        scenario.filters.emplace(name, read_filter(value));
    }
    scenario.seeing = read_seeing(top.required("seeing"));
    scenario.silicon = read_silicon(top.required("silicon"));
    scenario.amplifiers = read_amplifiers(top.required("amplifiers"));
    scenario.coupling = read_coupling(top.required("coupling"));
    const YamlMapping known =
        top.required("characterisation").mapping({"error_floor", "relative_error"});
    scenario.characterisation = {known.required("error_floor").number({1e-12, 0.1}),
                                 known.required("relative_error").number({0.0, 1.0})};
    const YamlMapping timing = top.required("timing").mapping({"clear_s", "readout_s"});
    scenario.clear_s = timing.required("clear_s").number(kDuration);
    scenario.readout_s = timing.required("readout_s").number(kDuration);
    read_scenario_camera(top, scenario);
    scenario.star_list = read_star_list(top.required("stars"));
    for (const auto& [name, value] : top.required("fields").entries(0, 1000)) {
        scenario.fields.push_back(read_field(name, value, scenario));
    }
    require_bounded_fields(top, scenario);
    read_exposures(top.required("exposures"), scenario);
    return scenario;
}

std::vector<simulate::SkyStar> read_bright_stars(const std::string& path) {
    CsvReader table(path);
    const int ra = table.required_column("ra_deg");
    const int dec = table.required_column("dec_deg");
    const int mag = table.required_column("vt_mag");
    std::vector<simulate::SkyStar> stars;
    while (table.next()) {
        const double dec_deg = table.number(dec);
        if (dec_deg < -90.0 || dec_deg > 90.0) {
            table.refuse(dec, "-90 to 90 degrees");
        }
        stars.push_back({simulate::direction(table.number(ra), dec_deg), table.number(mag)});
    }
    return stars;
}

}  // namespace straymark::io
