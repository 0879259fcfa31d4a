#include <fmt/format.h>
#include <memory>
#include <string>

#include "cli/command.h"
#include "io/scenario_file.h"
#include "io/simulated_night.h"

namespace straymark::cli {
namespace {

struct Options {
    std::string scenario, folder;
};

int run_simulate(const CommandLine& line, const Options& options) {
    const simulate::Scenario scenario = io::read_scenario(options.scenario);
    Progress progress(line, "simulate", static_cast<int>(scenario.exposures.size()));
    const io::NightSummary summary = io::simulate_night(scenario, options.folder, line.threads,
                                                        [&](int done) { progress.advance(done); });
    say(line, fmt::format("{}: {} exposures, {} with their truth ({} echoes), {} stars listed",
                          options.folder, summary.exposures, summary.truths, summary.echoes,
                          summary.listed_stars));
    print_json(line, Value::Object{{"folder", options.folder},
                                   {"exposures", summary.exposures},
                                   {"truths", summary.truths},
                                   {"echoes", summary.echoes},
                                   {"listed_stars", summary.listed_stars},
                                   {"lost_e", summary.lost_e}});
    return kDone;
}

}  // namespace

void add_simulate(CommandLine& line) {
    const auto options = std::make_shared<Options>();
    CLI::App* command = line.add(
        "simulate", "Makes a night of raw exposures with known truth, from physics of its own.",
        "straymark simulate demo_data/petrel_night.yaml --out night",
        [&line, options] { return run_simulate(line, *options); });
    command->add_option("scenario", options->scenario, "what to simulate (docs/scenario_file.md)")
        ->required();
    command->add_option("--out", options->folder, "folder to write; created where it is missing")
        ->required();
}

}  // namespace straymark::cli
