#include "night/build.h"

#include <fmt/format.h>
#include <memory>

#include "cli/command.h"
#include "cli/observatory.h"
#include "cli/raw_arguments.h"
#include "core/error.h"

namespace straymark::cli {
namespace {

struct BuildOptions {
    std::vector<std::string> raw;
    bool from_digests = false;
};

const char* name_of(BuildStatus status) {
    switch (status) {
        case BuildStatus::built:
            return "built";
        case BuildStatus::up_to_date:
            return "up to date";
        case BuildStatus::no_mask:
            return "no mask";
        case BuildStatus::failed:
            return "failed";
    }
    return "";
}

Value strings(const std::vector<std::string>& texts) {
    Value::Array array;
    for (const std::string& text : texts) {
        array.emplace_back(text);
    }
    return array;
}

Value json_of(const ExposureReport& report) {
    return Value::Object{{"exposure", report.id},
                         {"type", report.type},
                         {"status", name_of(report.status)},
                         {"message", report.message},
                         {"masks", strings(report.masks)},
                         {"flagged_fraction", report.flagged_fraction},
                         {"marginal_fraction", report.marginal_fraction},
                         {"unassessed_fraction", report.unassessed_fraction},
                         {"pointing", report.pointing},
                         {"notes", strings(report.notes)}};
}

Value json_of(const BuildReport& report, int status) {
    Value::Array exposures;
    for (const ExposureReport& exposure : report.exposures) {
        exposures.push_back(json_of(exposure));
    }
    Value::Array skipped;
    for (const Skipped& one : report.skipped) {
        skipped.push_back(
            Value::Object{{"file", one.file}, {"reason", one.reason}, {"harmless", one.harmless}});
    }
    return Value::Object{{"exposures", exposures}, {"skipped", skipped}, {"exit_status", status}};
}

void print_table(const CommandLine& line, const BuildReport& report) {
    say(line, fmt::format("{:<24} {:<11} {:>9} {:>9} {:>11}", "exposure", "status", "flagged",
                          "marginal", "unassessed"));
    for (const ExposureReport& one : report.exposures) {
        const bool masked =
            one.status == BuildStatus::built || one.status == BuildStatus::up_to_date;
        say(line,
            masked ? fmt::format("{:<24} {:<11} {:>8.3f}% {:>8.3f}% {:>10.3f}%", one.id,
                                 name_of(one.status), 100.0 * one.flagged_fraction,
                                 100.0 * one.marginal_fraction, 100.0 * one.unassessed_fraction)
                   : fmt::format("{:<24} {:<11} {}", one.id, name_of(one.status),
                                 one.status == BuildStatus::no_mask ? "(" + one.type + ")" : ""));
    }
}

void complain_about(const BuildReport& report, double accepted) {
    for (const Skipped& one : report.skipped) {
        complain((one.harmless ? "left out: " : "skipped: ") + one.reason);
    }
    for (const ExposureReport& one : report.exposures) {
        if (one.status == BuildStatus::failed) {
            complain("failed: " + one.message);
        } else if (one.unassessed_fraction > accepted) {
            complain(
                fmt::format("exposure '{}': {:.2f} % of its pixels are unassessed; the site "
                            "accepts {:.2f} %; the ASSESSED table of its mask says why",
                            one.id, 100.0 * one.unassessed_fraction, 100.0 * accepted));
        }
    }
}

int run_build(const CommandLine& line, const BuildOptions& options) {
    if (options.from_digests != options.raw.empty()) {
        throw UsageError("build: give raw files or folders, or --from-digests, not both");
    }
    OpenSite open(line.site);
    if (open.stars() == nullptr) {
        complain(open.stars_problem());
    }
    std::unique_ptr<Progress> bar;
    const auto progress = [&](int done, int total) {
        if (!bar) {
            bar = std::make_unique<Progress>(line, "masks", total);
        }
        bar->advance(done);
    };
    const BuildReport report =
        options.from_digests
            ? build_from_digests(open.site(), open.ports(), {}, line.threads, progress)
            : build_from_raw(open.site(), open.ports(), raw_files_from(options.raw), line.threads,
                             progress);
    bar.reset();
    const double accepted = open.site().accept_unassessed_fraction;
    const int status = report.nothing_done()         ? kFailed
                       : report.incomplete(accepted) ? kIncomplete
                                                     : kDone;
    print_table(line, report);
    complain_about(report, accepted);
    print_json(line, json_of(report, status));
    return status;
}

}  // namespace

void add_build(CommandLine& line) {
    auto options = std::make_shared<BuildOptions>();
    CLI::App* command = line.add("build", "Makes one mask file for each raw file, in time order.",
                                 "straymark build --site site.yaml raw/",
                                 [&line, options] { return run_build(line, *options); });
    line.add_site(command);
    command->add_option("raw", options->raw, "raw files, or folders of raw files")
        ->type_name("RAW");
    command->add_flag("--from-digests", options->from_digests,
                      "make the masks again from what was kept of each exposure, without pixels");
}

}  // namespace straymark::cli
