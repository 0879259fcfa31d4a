#include "io/simulated_night.h"

#include <algorithm>
#include <cmath>
#include <fmt/format.h>
#include <iterator>
#include <vector>

#include "io/files.h"
#include "io/product_file.h"
#include "io/scenario_file.h"
#include "io/simulated_fits.h"
#include "io/simulated_product.h"
#include "io/simulated_site.h"
#include "simulate/characterise.h"
#include "simulate/exposure.h"

namespace straymark::io {
namespace {

using simulate::Characterisation;
using simulate::ExposureKind;
using simulate::Scenario;
using simulate::SimulatedExposure;
using simulate::World;

// The laboratory's signals stand on a sky of this many electrons.
constexpr double kCalibrationSky_e = 400.0;
constexpr double kValidBefore_d = 30.0;
constexpr double kValidAfter_d = 365.0;

World make_world(const Scenario& scenario) {
    World world{scenario, simulate::build_instrument(scenario), {}, {}};
    world.coupling = simulate::draw_coupling(scenario, world.instrument);
    for (int f = 0; f < static_cast<int>(scenario.fields.size()); ++f) {
        world.fields.push_back(
            simulate::make_field(scenario, f, read_bright_stars(scenario.fields[f].stars)));
    }
    return world;
}

std::int64_t write_star_list(const World& world, const std::string& path) {
    std::string text = "id,ra,dec,mag,epoch\n";
    std::int64_t count = 0;
    for (int f = 0; f < static_cast<int>(world.fields.size()); ++f) {
        int number = 0;
        for (const simulate::ListedStar& star :
             simulate::list_field(world.scenario, f, world.fields[f])) {
            fmt::format_to(std::back_inserter(text), "{}-{:06d},{:.7f},{:.7f},{:.3f},2000.0\n",
                           world.scenario.fields[f].name, ++number, star.ra_deg, star.dec_deg,
                           star.mag);
            ++count;
        }
    }
    write_text(path, text);
    return count;
}

void write_observatory(const World& world, const std::string& folder) {
    const Characterisation known =
        simulate::characterise(world.scenario, world.instrument, world.coupling, kCalibrationSky_e);
    const std::string& name = world.scenario.name;
    write_text(folder + "/" + name + ".yaml", simulated_camera_file(world, known));
    write_text(folder + "/" + name + "_amplifiers.csv", simulated_amplifier_table(world));
    const std::string pairs = simulated_pair_table(world, known);
    if (!pairs.empty()) {
        write_text(folder + "/" + name + "_pairs.csv", pairs);
    }
    write_text(folder + "/site.yaml", simulated_site_file(world, "calib/"));
    for (const char* calibrations : {"calib", "calib_priors_only"}) {
        make_folder(folder + "/" + calibrations);
    }
    const MjdUtc from{std::floor(world.scenario.exposures.front().mjd) - kValidBefore_d};
    const MjdUtc to{std::floor(world.scenario.exposures.back().mjd) + kValidAfter_d};
    write_product(folder + "/calib/crosstalk.fits",
                  simulated_product(world, known, from, to, true));
    write_product(folder + "/calib_priors_only/crosstalk.fits",
                  simulated_product(world, known, from, to, false));
}

}  // namespace

NightSummary simulate_night(const Scenario& scenario, const std::string& folder, int threads,
                            const std::function<void(int)>& done) {
    NightSummary summary;
    make_folder(folder + "/raw");
    make_folder(folder + "/truth");
    const World world = make_world(scenario);
    write_observatory(world, folder);
    summary.listed_stars = write_star_list(world, folder + "/stars.csv");
    for (int i = 0; i < static_cast<int>(scenario.exposures.size()); ++i) {
        const SimulatedExposure exposure = simulate::expose(world, i, threads);
        write_simulated_raw(folder + "/raw/" + exposure.plan.id + ".fits", world, exposure);
        if (exposure.plan.kind == ExposureKind::sky) {
            write_simulated_truth(folder + "/truth/" + exposure.plan.id + ".truth.fits", world,
                                  exposure, threads);
            ++summary.truths;
            summary.echoes += static_cast<std::int64_t>(exposure.truth.echoes.size());
        }
        summary.lost_e += exposure.lost_e;
        done(++summary.exposures);
    }
    return summary;
}

}  // namespace straymark::io
