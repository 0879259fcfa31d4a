#include "simulate/exposure.h"

#include <algorithm>
#include <cmath>
#include <optional>
#include <utility>

#include "core/error.h"
#include "core/parallel.h"
#include "core/random.h"
#include "simulate/starlight.h"
#include "simulate/streams.h"
#include "simulate/telescope.h"
#include "simulate/video.h"

namespace straymark::simulate {
namespace {

constexpr double kSecondsPerDay = 86400.0;
constexpr int kRowsAtOnce = 32;
// Star light is followed out to this share of the empty field's noise.
constexpr double kFaintestWing = 0.01;
// Echoes whose peak exceeds this share of the victim's noise are listed.
constexpr double kLeastEcho = 0.05;

int blocks_of(int rows) {
    return (rows + kRowsAtOnce - 1) / kRowsAtOnce;
}

Instants instants_of(const Scenario& scenario, const ExposurePlan& plan) {
    const double end = plan.mjd + plan.exposure_s / kSecondsPerDay;
    return {plan.mjd - scenario.clear_s / kSecondsPerDay, plan.mjd, end,
            end + scenario.readout_s / kSecondsPerDay};
}

Pointing point(const Scenario& scenario, const ExposurePlan& plan, int index) {
    Pointing pointing;
    RandomStream stream(scenario.seed, stream_of(Purpose::aim, index));
    Vec3 asked_for = direction(0.0, 0.0);
    if (plan.field >= 0) {
        const FieldPlan& field = scenario.fields[plan.field];
        asked_for = nudged(direction(field.ra_deg, field.dec_deg), plan.offset_arcsec);
    }
    const TelescopePlan& telescope = scenario.telescope;
    const Vec2 error{telescope.pointing_error_arcsec * stream.normal(),
                     telescope.pointing_error_arcsec * stream.normal()};
    pointing.ahead = nudged(asked_for, error);
    pointing.camera_angle_deg =
        plan.camera_angle_deg + telescope.camera_angle_error_deg * stream.normal();
    pointing.header = equatorial(asked_for);
    pointing.header_camera_angle_deg = plan.camera_angle_deg;
    return pointing;
}

bool sees_sky(const ExposurePlan& plan) {
    return plan.kind == ExposureKind::sky || plan.kind == ExposureKind::focus;
}

double pixel_arcsec(const Scenario& scenario) {
    return scenario.silicon.pixel_um / 1000.0 / scenario.telescope.focal_length_mm / kArcsecond;
}

/// What every pixel receives apart from stars.
double even_light(const Scenario& scenario, const ExposurePlan& plan) {
    if (plan.kind == ExposureKind::flat) {
        return plan.flat_e;
    }
    if (!sees_sky(plan)) {
        return 0.0;
    }
    const double zero_point = scenario.filters.at(plan.filter).zero_point;
    return plan.exposure_s * std::pow(pixel_arcsec(scenario), 2.0) *
           std::pow(10.0, 0.4 * (zero_point - plan.sky_mag_arcsec2));
}

/// Electrons from a star of magnitude zero.
double light_of_zero_magnitude(const Scenario& scenario, const ExposurePlan& plan,
                               const Instants& instants, Vec3 ahead) {
    const Vec3 up = zenith(scenario.site, 0.5 * (instants.start + instants.end));
    const std::optional<double> air = airmass(up, ahead);
    if (!air) {
        throw InputError({scenario.path, "exposures, id " + plan.id,
                          "a field less than 10 degrees above the horizon at that time",
                          "a field that the site can see", "change mjd or field"});
    }
    const FilterPlan& filter = scenario.filters.at(plan.filter);
    return plan.exposure_s * plan.transparency *
           std::pow(10.0, 0.4 * (filter.zero_point - filter.extinction * (*air - 1.0)));
}

PointSpread spread_on(const Scenario& scenario, const ExposurePlan& plan, const Chip& chip) {
    const double angle = radians(scenario.seeing.axis_deg);
    const Vec2 axis{std::cos(angle), std::sin(angle)};
    const double pixel_mm = std::sqrt(dot(chip.column_mm, chip.column_mm));
    return {plan.seeing_arcsec / pixel_arcsec(scenario),
            scenario.seeing.moffat_beta,
            scenario.seeing.ellipticity,
            {dot(axis, chip.column_mm) / pixel_mm, dot(axis, chip.row_mm) / pixel_mm}};
}

/// The stars whose light reaches one detector.
std::vector<StarImage> images_on(const Chip& chip, const Aim& aim, const PointSpread& spread,
                                 const std::vector<SkyStar>& stars, double zero_magnitude_e,
                                 double faintest_e) {
    std::vector<StarImage> images;
    for (const SkyStar& star : stars) {
        const std::optional<Vec2> place = aim.image(star.towards);
        if (!place) {
            continue;
        }
        const Vec2 pixel = chip.pixel(*place);
        const double light_e = zero_magnitude_e * std::pow(10.0, -0.4 * star.mag);
        const double reach = spread.reach_px(light_e, faintest_e);
        if (pixel.x > -reach && pixel.x < chip.width - 1 + reach && pixel.y > -reach &&
            pixel.y < chip.height - 1 + reach) {
            images.push_back({pixel, light_e, reach});
        }
    }
    return images;
}

/// Light and charge of all detectors, before read-out.
struct Collected {
    std::vector<Image> light, charge;
    double lost_e = 0.0;
};

/// Calls body(detector, first row, end row) for blocks of rows of all detectors, in parallel.
template <typename Body>
void for_row_blocks(const Instrument& instrument, int threads, const Body& body) {
    std::vector<std::pair<int, int>> blocks;
    for (int d = 0; d < static_cast<int>(instrument.chips.size()); ++d) {
        for (int b = 0; b < blocks_of(instrument.chips[d].height); ++b) {
            blocks.emplace_back(d, b * kRowsAtOnce);
        }
    }
    parallel_for(static_cast<int>(blocks.size()), threads, [&](int i) {
        const auto [detector, first] = blocks[i];
        body(detector, first, std::min(first + kRowsAtOnce, instrument.chips[detector].height));
    });
}

void paint(const World& world, const SimulatedExposure& exposure, int threads,
           std::vector<Image>& light) {
    const Scenario& scenario = world.scenario;
    const Aim aim(scenario.telescope, exposure.pointing.ahead, exposure.pointing.camera_angle_deg);
    const double zero_e = light_of_zero_magnitude(scenario, exposure.plan, exposure.instants,
                                                  exposure.pointing.ahead);
    const std::vector<SkyStar>& stars = world.fields[exposure.plan.field];
    const int detectors = static_cast<int>(world.instrument.chips.size());
    std::vector<std::vector<StarImage>> images(detectors);
    std::vector<std::optional<PointSpread>> spreads(detectors);
    parallel_for(detectors, threads, [&](int d) {
        const Chip& chip = world.instrument.chips[d];
        spreads[d] = spread_on(scenario, exposure.plan, chip);
        images[d] = images_on(chip, aim, *spreads[d], stars, zero_e,
                              kFaintestWing * std::sqrt(exposure.even_e));
    });
    for_row_blocks(world.instrument, threads, [&](int d, int first, int end) {
        paint_stars(images[d], *spreads[d], world.instrument.chips[d].width, first, end, light[d]);
    });
}

Collected collect(const World& world, const SimulatedExposure& exposure, int threads) {
    const Scenario& scenario = world.scenario;
    const Instrument& instrument = world.instrument;
    Collected collected;
    for (const Chip& chip : instrument.chips) {
        collected.light.emplace_back(static_cast<std::size_t>(chip.width) * chip.height, 0.0F);
    }
    collected.charge = collected.light;
    if (sees_sky(exposure.plan)) {
        paint(world, exposure, threads, collected.light);
    }
    const auto illumination = [&](int detector) {
        return Illumination{scenario.seed, exposure.number, detector, exposure.even_e,
                            scenario.silicon.pixel_response};
    };
    for_row_blocks(instrument, threads, [&](int d, int first, int end) {
        const std::size_t width = instrument.chips[d].width;
        for (int row = first; row < end; ++row) {
            collect_row(illumination(d), row,
                        std::span(collected.light[d]).subspan(row * width, width),
                        std::span(collected.charge[d]).subspan(row * width, width));
        }
    });
    std::vector<double> lost(instrument.chips.size());
    parallel_for(static_cast<int>(lost.size()), threads, [&](int d) {
        const Chip& chip = instrument.chips[d];
        const double area_cm2 =
            chip.width * chip.height * std::pow(scenario.silicon.pixel_um * 1e-4, 2.0);
        const double seconds = exposure.plan.exposure_s + scenario.readout_s;
        add_cosmic_rays(illumination(d),
                        scenario.silicon.cosmic_rays_per_cm2_s * area_cm2 * seconds, chip.width,
                        chip.height, collected.charge[d]);
        lost[d] = bleed(chip, collected.charge[d]);
    });
    for (const double some : lost) {
        collected.lost_e += some;
    }
    return collected;
}

/// Calls body(clock, row) for every row of every clock, in parallel by blocks; `make` makes the
/// work space of one block.
template <typename Make, typename Body>
void for_clocked_rows(const Instrument& instrument, int threads, const Make& make,
                      const Body& body) {
    for (int clock = 0; clock < static_cast<int>(instrument.clocks.size()); ++clock) {
        const int rows = instrument.clocks[clock].rows;
        parallel_for(blocks_of(rows), threads, [&](int block) {
            auto space = make(clock);
            for (int row = block * kRowsAtOnce; row < std::min((block + 1) * kRowsAtOnce, rows);
                 ++row) {
                body(clock, row, space);
            }
        });
    }
}

void read_out(const World& world, const std::vector<Image>& charge, int threads,
              SimulatedExposure& exposure) {
    const Scenario& scenario = world.scenario;
    const Instrument& instrument = world.instrument;
    std::vector<BiasLevel> bias;
    for (int c = 0; c < static_cast<int>(instrument.channels.size()); ++c) {
        const Channel& channel = instrument.channels[c];
        bias.emplace_back(scenario, instrument, exposure.number, c);
        exposure.raw.emplace_back(static_cast<std::size_t>(channel.ticks_in_row()) * channel.rows);
    }
    struct Space {
        LevelRow level, slow, echo;
    };
    const auto make = [&](int clock) {
        const ClockGroup& group = instrument.clocks[clock];
        const LevelRow level(static_cast<int>(group.channels.size()), group.ticks_in_row);
        return Space{level, level, level};
    };
    for_clocked_rows(instrument, threads, make, [&](int clock, int row, Space& space) {
        const ClockGroup& group = instrument.clocks[clock];
        video_row(instrument, group, charge, row, space.level);
        leak_row(instrument, world.coupling, clock, space.level, space.slow, space.echo);
        for (int place = 0; place < static_cast<int>(group.channels.size()); ++place) {
            const int c = group.channels[place];
            digitise_row(
                scenario, instrument, exposure.number, c, row, bias[c].at(row),
                space.level.of(place), space.echo.of(place),
                exposure.raw[c].data() + static_cast<std::size_t>(row) * group.ticks_in_row);
        }
    });
}

std::vector<double> centred_spread(const PointSpread& spread) {
    std::vector<double> values;
    double sum = 0.0;
    for (int y = 0; y < kSpreadSide; ++y) {
        for (int x = 0; x < kSpreadSide; ++x) {
            values.push_back(
                spread.in_pixel({x - 0.5 * (kSpreadSide - 1), y - 0.5 * (kSpreadSide - 1)}));
            sum += values.back();
        }
    }
    for (double& value : values) {
        value /= sum;
    }
    return values;
}

/// Takes the collected charge apart: what it leaves is the truth.
Truth find_truth(const World& world, const SimulatedExposure& exposure, Collected collected,
                 int threads) {
    const Instrument& instrument = world.instrument;
    const double even_e = exposure.even_e;
    Truth truth;
    for (const Channel& channel : instrument.channels) {
        truth.noise_e.push_back(std::hypot(std::sqrt(even_e), channel.read_noise_e));
    }
    std::vector<Image>& excess = collected.charge;
    parallel_for(static_cast<int>(instrument.chips.size()), threads,
                 [&](int d) { excess_charge(even_e, collected.light[d], excess[d]); });
    // The light has served: its memory takes the result.
    truth.crosstalk_e = std::move(collected.light);
    for (Image& image : truth.crosstalk_e) {
        std::fill(image.begin(), image.end(), 0.0F);
    }
    for_clocked_rows(
        instrument, threads,
        [&](int clock) { return TruthRow(instrument, world.coupling, clock, even_e); },
        [&](int, int row, TruthRow& space) { space.add(excess, row, truth.crosstalk_e); });
    truth.echoes =
        list_echoes(instrument, world.coupling, excess, even_e, truth.noise_e, kLeastEcho, threads);
    for (const Chip& chip : instrument.chips) {
        truth.spread.push_back(centred_spread(spread_on(world.scenario, exposure.plan, chip)));
    }
    return truth;
}

}  // namespace

SimulatedExposure expose(const World& world, int index, int threads) {
    SimulatedExposure exposure;
    exposure.plan = world.scenario.exposures[index];
    exposure.number = index + 1;
    exposure.pointing = point(world.scenario, exposure.plan, index);
    exposure.instants = instants_of(world.scenario, exposure.plan);
    exposure.even_e = even_light(world.scenario, exposure.plan);
    Collected collected = collect(world, exposure, threads);
    exposure.lost_e = collected.lost_e;
    read_out(world, collected.charge, threads, exposure);
    if (exposure.plan.kind == ExposureKind::sky) {
        exposure.truth = find_truth(world, exposure, std::move(collected), threads);
    }
    return exposure;
}

}  // namespace straymark::simulate
