#include <fmt/format.h>
#include <functional>
#include <memory>

#include "artifacts/artifact.h"
#include "cli/command.h"
#include "cli/observatory.h"
#include "cli/raw_arguments.h"
#include "core/error.h"

namespace straymark::cli {
namespace {

/// Collects what was looked at, line by line, and what is wrong.
class Findings {
public:
    void note(const std::string& what, const std::string& text) { add(what, "ok", text); }
    void problem(const std::string& what, const std::string& text) {
        add(what, "problem", text);
        ++problems_;
    }
    /// Runs a check; what it throws becomes a problem.
    void guard(const std::string& what, const std::function<std::string()>& check) {
        try {
            note(what, check());
        } catch (const InputError& error) {
            problem(what, error.what());
        } catch (const SystemError& error) {
            problem(what, error.what());
        }
    }
    [[nodiscard]] int problems() const { return problems_; }

    void print(const CommandLine& line) const {
        for (const auto& row : rows_) {
            if (row.state == "problem") {
                complain(row.what + ": " + row.text);
            } else {
                say(line, fmt::format("{:<12} {:<8} {}", row.what, row.state, row.text));
            }
        }
    }
    [[nodiscard]] Value json() const {
        Value::Array rows;
        for (const auto& row : rows_) {
            rows.push_back(
                Value::Object{{"what", row.what}, {"state", row.state}, {"text", row.text}});
        }
        return Value::Object{{"findings", rows}, {"problems", problems_}};
    }

private:
    struct Row {
        std::string what, state, text;
    };
    void add(const std::string& what, const char* state, const std::string& text) {
        rows_.push_back({what, state, text});
    }
    std::vector<Row> rows_;
    int problems_ = 0;
};

std::string camera_summary(const Camera& camera) {
    std::size_t amplifiers = 0;
    std::size_t dead = 0;
    for (const Detector& detector : camera.detectors) {
        amplifiers += detector.amplifiers.size();
        for (const Amplifier& amplifier : detector.amplifiers) {
            dead += amplifier.status == AmplifierStatus::dead ? 1 : 0;
        }
    }
    return fmt::format("{}: {} detectors, {} amplifiers ({} dead), {} clocks, filters {}",
                       camera.name, camera.detectors.size(), amplifiers, dead,
                       camera.clock_groups().size(), [&] {
                           std::string names;
                           for (const auto& [name, filter] : camera.filters) {
                               names += (names.empty() ? "" : ", ") + name;
                           }
                           return names;
                       }());
}

void check_calibrations(const OpenSite& open, Findings& findings) {
    const Site& site = open.site();
    for (const Artifact& artifact : registry()) {
        const std::string& what = artifact.name;
        if (artifact.make == nullptr) {
            findings.note(what, "off: this version does not predict it");
            continue;
        }
        if (!site.predictor_on[static_cast<std::size_t>(artifact.kind)]) {
            findings.note(what, "off: switched off in the site file");
            continue;
        }
        findings.guard(what, [&] {
            int fitting = 0;
            for (const Product& product : open.calibrations().all(artifact.name)) {
                artifact.make(site.camera, product);
                ++fitting;
            }
            if (fitting == 0) {
                throw InputError({site.calibrations_path, "", "no " + what + " product",
                                  "one, or the predictor switched off",
                                  "masks would be unassessed everywhere"});
            }
            return fmt::format("{} product{} fit{} this camera", fitting, fitting == 1 ? "" : "s",
                               fitting == 1 ? "s" : "");
        });
    }
}

void check_raw(OpenSite& open, const std::vector<std::string>& files, Findings& findings) {
    const NightPorts ports = open.ports();
    const Camera& camera = open.site().camera;
    for (const std::string& path : files) {
        findings.guard("raw", [&] {
            const RawFile file = ports.raw.inspect(path);
            std::string detectors;
            for (const int d : file.detectors) {
                detectors += (detectors.empty() ? "" : ", ") +
                             camera.detectors[static_cast<std::size_t>(d)].id;
                const auto frame = ports.raw.open(file, d);
                const std::vector<std::string> cards = frame->wcs_cards();
                if (Wcs::present(cards)) {
                    const Wcs readable_or_error(cards, path, "detector " + std::to_string(d + 1));
                }
            }
            std::string text =
                fmt::format("{}: exposure '{}', type '{}', filter {}, MJD {:.6f}, detectors {}",
                            path, file.header.id, file.header.type_value, file.header.filter,
                            file.header.start.days, detectors);
            for (const std::string& note : file.header.notes) {
                text += "; " + note;
            }
            for (const std::string& note : file.notes) {
                text += "; " + note;
            }
            return text;
        });
    }
}

int run_check(const CommandLine& line, const std::vector<std::string>& raw) {
    OpenSite open(line.site);
    Findings findings;
    findings.note("site", line.site);
    findings.note("camera", camera_summary(open.site().camera));
    if (open.stars() != nullptr) {
        findings.guard("stars", [&] {
            open.verify_stars();
            return fmt::format("{}: {} stars", open.site().stars_path, open.stars()->size());
        });
    } else {
        findings.problem("stars", open.stars_problem());
    }
    check_calibrations(open, findings);
    check_raw(open, raw_files_from(raw), findings);
    findings.print(line);
    print_json(line, findings.json());
    return findings.problems() == 0 ? kDone : kIncomplete;
}

}  // namespace

void add_check(CommandLine& line) {
    auto raw = std::make_shared<std::vector<std::string>>();
    CLI::App* command = line.add(
        "check", "Looks at everything a site file names, and at raw files; writes nothing.",
        "straymark check --site site.yaml raw/", [&line, raw] { return run_check(line, *raw); });
    line.add_site(command);
    command->add_option("raw", *raw, "raw files, or folders of raw files")->type_name("RAW");
}

}  // namespace straymark::cli
