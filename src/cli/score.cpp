#include <cstddef>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "cli/command.h"
#include "core/error.h"
#include "core/parallel.h"
#include "io/picture.h"
#include "io/score_input.h"
#include "io/truth_file.h"
#include "score/figure.h"
#include "score/report.h"
#include "score/response.h"

namespace straymark::cli {
namespace {

constexpr const char* kKind = "crosstalk";
constexpr int kLargestBackground = 100'000;

struct Options {
    std::string masks, truth, picture;
    int background_px = 0;
};

/// The mask files of one exposure that can be used; without any where they cannot, and why.
struct UsableMasks {
    std::optional<io::ExposureMasks> masks;
    std::string fault;
};

UsableMasks usable_masks(const io::MaskIndex& index, const io::TruthFile& truth,
                         const Options& options) {
    const auto paths = index.paths.find(truth.exposure());
    if (paths == index.paths.end()) {
        return {std::nullopt, "no mask of this exposure in " + options.masks};
    }
    try {
        return {io::ExposureMasks(paths->second, truth, kKind, options.background_px), ""};
    } catch (const InputError& fault) {
        return {std::nullopt, fault.what()};
    }
}

/// A detector whose image is damaged counts as one without a mask.
score::FoundDetector found_detector(UsableMasks& usable, const std::string& id) {
    if (!usable.masks) {
        return {};
    }
    try {
        score::FoundDetector found = usable.masks->detector(id);
        if (!found.present) {
            usable.fault += (usable.fault.empty() ? "" : "; ") + ("no mask of detector " + id);
        }
        return found;
    } catch (const InputError& fault) {
        usable.fault += (usable.fault.empty() ? "" : "; ") + std::string(fault.what());
        return {};
    }
}

score::ExposureScore score_exposure(const std::string& path, const io::MaskIndex& index,
                                    const Options& options) {
    const io::TruthFile truth(path);
    UsableMasks usable = usable_masks(index, truth, options);
    score::ExposureScore result{truth.exposure(), "", {}};
    for (const std::string& id : truth.detectors()) {
        const score::TrueDetector detector = truth.detector(id, kKind);
        result.tally +=
            score::score_detector(detector, score::true_response(detector, options.background_px),
                                  found_detector(usable, id));
    }
    result.fault = usable.fault;
    return result;
}

/// The first exposure that has masks; the first of all where none has.
std::size_t exposure_to_show(const score::NightScore& night) {
    for (std::size_t i = 0; i < night.exposures.size(); ++i) {
        if (night.exposures[i].fault.empty()) {
            return i;
        }
    }
    return 0;
}

void draw(const score::NightScore& night, const std::string& path, const io::MaskIndex& index,
          const Options& options) {
    const io::TruthFile truth(path);
    UsableMasks usable = usable_masks(index, truth, options);
    std::vector<score::FigureDetector> detectors;
    for (const std::string& id : truth.detectors()) {
        score::TrueDetector detector = truth.detector(id, kKind);
        std::vector<float> response = score::true_response(detector, options.background_px);
        detectors.push_back({std::move(detector), std::move(response), found_detector(usable, id)});
    }
    const score::Canvas canvas = score::figure_of(night, truth.exposure(), detectors);
    io::write_png(options.picture, canvas.width(), canvas.height(), canvas.rgb());
}

int run(const CommandLine& line, const Options& options) {
    const std::vector<std::string> truths = io::truth_files_in(options.truth);
    const io::MaskIndex index = io::index_masks(options.masks);
    for (const std::string& fault : index.faults) {
        complain(fault);
    }
    std::vector<score::ExposureScore> exposures(truths.size());
    {
        Progress progress(line, "score", static_cast<int>(truths.size()));
        parallel_for(static_cast<int>(truths.size()), line.threads, [&](int i) {
            const auto k = static_cast<std::size_t>(i);
            exposures[k] = score_exposure(truths[k], index, options);
            progress.advance(i + 1);
        });
    }
    const score::NightScore night = score::night_score(kKind, std::move(exposures));
    for (const score::ExposureScore& exposure : night.exposures) {
        if (!exposure.fault.empty()) {
            complain(exposure.exposure + ": counted as missed: " + exposure.fault);
        }
    }
    if (!options.picture.empty()) {
        draw(night, truths[exposure_to_show(night)], index, options);
    }
    say(line, score::table_of(night));
    print_json(line, score::json_of(night));
    if (!score::is_complete(night)) {
        return kIncomplete;
    }
    return score::all_met(night.figures) ? kDone : kFailed;
}

}  // namespace

void add_score(CommandLine& line) {
    const auto options = std::make_shared<Options>();
    CLI::App* command = line.add(
        "score",
        "Judges masks against the known truth of a simulated night. Exit status: 0 all figures "
        "met, 1 one is not, 3 a mask is missing (counted as missed).",
        "straymark score --masks masks/ --truth night/ --picture score.png",
        [&line, options] { return run(line, *options); });
    command->add_option("--masks", options->masks, "folder of mask files")->required();
    command->add_option("--truth", options->truth, "folder that `straymark simulate` wrote")
        ->required();
    command->add_option("--picture", options->picture, "draw the first exposure to this PNG file");
    command
        ->add_option("--background-px", options->background_px,
                     "side of the box whose mean the detection subtracts (default 0: none)")
        ->check(CLI::Range(0, kLargestBackground));
}

}  // namespace straymark::cli
