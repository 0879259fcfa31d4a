#include "night/build.h"

#include <algorithm>
#include <filesystem>
#include <fmt/format.h>
#include <map>

#include "core/error.h"
#include "core/parallel.h"
#include "exposure/measure.h"
#include "night/mask_exposure.h"

namespace straymark {
namespace {

const char* name_of(ExposureType type) {
    switch (type) {
        case ExposureType::sky:
            return "sky";
        case ExposureType::dark:
            return "dark";
        case ExposureType::flat:
            return "flat";
        case ExposureType::focus:
            return "focus";
        case ExposureType::other:
            return "other";
    }
    return "";
}

std::string base_name(const std::string& path) {
    return std::filesystem::path(path).filename().string();
}

std::string pointing_line(const Pointing& pointing) {
    return pointing.refined
               ? fmt::format("{} stars, {:.2f} px rms, moved {:.1f} arcsec, turned {:.3f} degree",
                             pointing.matched_stars, pointing.residual_px, pointing.shift_arcsec,
                             pointing.turn_deg)
               : "header's, not refined: " + pointing.reason;
}

/// Builds exposures one after the other, keeping the predictors between them.
class NightBuilder {
public:
    NightBuilder(const Site& site, const NightPorts& ports, int threads)
        : site_(site), ports_(ports), threads_(threads), shelf_(site, ports.calibrations) {}

    ExposureReport from_raw(const PlannedExposure& planned) {
        return reported(planned.header, [&](ExposureReport& report) {
            std::vector<std::string> inputs;
            for (const RawFile& file : planned.files) {
                inputs.push_back(base_name(file.path) + " " + file.digest);
                report.notes.insert(report.notes.end(), file.notes.begin(), file.notes.end());
            }
            const PredictorsInForce predictors = shelf_.in_force(planned.header);
            const std::string key = build_key(site_, predictors, star_digest(), inputs);
            if (all_up_to_date(planned, key, report)) {
                return;
            }
            ExposureDigest digest = measure(planned, predictors);
            digest.input_digests = inputs;
            ports_.digests.save(digest);
            write(digest, predictors, key, report);
        });
    }

    ExposureReport from_digest(const ExposureDigest& digest) {
        return reported(digest.header, [&](ExposureReport& report) {
            if (digest.camera_digest != site_.camera.digest) {
                throw InputError({"digest of '" + digest.header.id + "'", "camera",
                                  digest.camera_digest, site_.camera.digest,
                                  "the camera file has changed since: build from the raw files"});
            }
            const PredictorsInForce predictors = shelf_.in_force(digest.header);
            require_floor(digest, predictors);
            const std::string key =
                build_key(site_, predictors, star_digest(), digest.input_digests);
            write(digest, predictors, key, report);
        });
    }

private:
    template <typename Body>
    ExposureReport reported(const ExposureHeader& header, const Body& body) {
        ExposureReport report;
        report.id = header.id;
        report.type = name_of(header.type);
        report.notes = header.notes;
        if (header.type == ExposureType::other) {
            report.message = fmt::format(
                "exposure '{}': found type '{}'; expected one listed under 'types' in {}; add it "
                "there",
                header.id, header.type_value, site_.camera.path);
            return report;
        }
        if (header.type != ExposureType::sky) {
            report.status = BuildStatus::no_mask;
            return report;
        }
        try {
            body(report);
        } catch (const InputError& error) {
            report.message = error.what();
        } catch (const SystemError& error) {
            report.message = error.what();
        }
        return report;
    }

    [[nodiscard]] std::string star_digest() const {
        return ports_.stars != nullptr ? ports_.stars->digest() : "none";
    }

    bool all_up_to_date(const PlannedExposure& planned, const std::string& key,
                        ExposureReport& report) const {
        ExposureReport found = report;
        for (const RawFile& file : planned.files) {
            const bool science =
                std::any_of(file.detectors.begin(), file.detectors.end(), [&](int detector) {
                    return site_.camera.detectors[static_cast<std::size_t>(detector)].role ==
                           DetectorRole::science;
                });
            if (!science) {
                continue;
            }
            const std::string name = base_name(file.path);
            const std::optional<MaskSummary> mask = ports_.masks.existing(name);
            if (!mask || mask->build_key != key) {
                return false;
            }
            found.add_mask(ports_.masks.path_of(name), *mask);
        }
        report = std::move(found);
        report.status = BuildStatus::up_to_date;
        return true;
    }

    ExposureDigest measure(const PlannedExposure& planned, const PredictorsInForce& predictors) {
        const Camera& camera = site_.camera;
        ExposureDigest digest;
        digest.header = planned.header;
        digest.camera_digest = camera.digest;
        digest.detectors.resize(camera.detectors.size());
        std::vector<std::pair<const RawFile*, int>> jobs;
        for (const RawFile& file : planned.files) {
            for (const int detector : file.detectors) {
                jobs.emplace_back(&file, detector);
            }
        }
        const DigestPolicy policy{digest_floor_sigma(predictors)};
        parallel_for(static_cast<int>(jobs.size()), threads_, [&](int i) {
            const auto& [file, detector] = jobs[static_cast<std::size_t>(i)];
            const std::unique_ptr<DetectorFrame> frame = ports_.raw.open(*file, detector);
            DetectorDigest& measured = digest.detectors[static_cast<std::size_t>(detector)];
            measured = measure_detector(camera, detector, *frame, policy, threads_);
            measured.raw_file = base_name(file->path);
        });
        for (std::size_t d = 0; d < digest.detectors.size(); ++d) {
            if (digest.detectors[d].raw_file.empty()) {
                mark_absent(camera.detectors[d], digest.detectors[d]);
            }
        }
        share_psf(digest);
        refine_pointing(camera, ports_.stars, digest);
        return digest;
    }

    static void mark_absent(const Detector& detector, DetectorDigest& digest) {
        digest.present = false;
        digest.reason = "no file of this exposure holds detector " + detector.id;
        digest.amplifiers.resize(detector.amplifiers.size());
        for (std::size_t a = 0; a < detector.amplifiers.size(); ++a) {
            AmplifierDigest& amplifier = digest.amplifiers[a];
            const bool dead = detector.amplifiers[a].status == AmplifierStatus::dead;
            amplifier.state = dead ? AmplifierState::dead : AmplifierState::missing;
            amplifier.reason = digest.reason;
        }
    }

    /// A digest keeps pixels down to a floor; a product that needs fainter ones needs the pixels.
    void require_floor(const ExposureDigest& digest, const PredictorsInForce& predictors) const {
        constexpr double kRounding = 1.001;
        const double needed = digest_floor_sigma(predictors);
        for (std::size_t d = 0; d < digest.detectors.size(); ++d) {
            for (const AmplifierDigest& amplifier : digest.detectors[d].amplifiers) {
                if (amplifier.state == AmplifierState::ok &&
                    amplifier.floor_adu > needed * amplifier.noise_adu * kRounding) {
                    throw InputError(
                        {"digest of '" + digest.header.id + "'",
                         "detector " + site_.camera.detectors[d].id,
                         fmt::format("pixels down to {:.1f} times the noise",
                                     amplifier.floor_adu / amplifier.noise_adu),
                         fmt::format("down to {:.1f} for the products in force", needed),
                         "build this exposure from its raw files"});
                }
            }
        }
    }

    void write(const ExposureDigest& digest, const PredictorsInForce& predictors,
               const std::string& key, ExposureReport& report) {
        write_masks(site_, ports_.masks, predictors, digest, key, threads_, report);
        report.pointing = pointing_line(digest.pointing);
        report.status = BuildStatus::built;
    }

    const Site& site_;
    const NightPorts& ports_;
    int threads_;
    PredictorShelf shelf_;
};

}  // namespace

void ExposureReport::add_mask(const std::string& path, const MaskSummary& summary) {
    masks.push_back(path);
    flagged_fraction = std::max(flagged_fraction, summary.flagged_fraction);
    marginal_fraction = std::max(marginal_fraction, summary.marginal_fraction);
    unassessed_fraction = std::max(unassessed_fraction, summary.unassessed_fraction);
}

bool BuildReport::incomplete(double accepted_unassessed_fraction) const {
    return std::any_of(skipped.begin(), skipped.end(),
                       [](const Skipped& one) { return !one.harmless; }) ||
           std::any_of(exposures.begin(), exposures.end(), [&](const ExposureReport& one) {
               return one.status == BuildStatus::failed ||
                      one.unassessed_fraction > accepted_unassessed_fraction;
           });
}

bool BuildReport::nothing_done() const {
    const bool failed =
        std::any_of(skipped.begin(), skipped.end(),
                    [](const Skipped& one) { return !one.harmless; }) ||
        std::any_of(exposures.begin(), exposures.end(),
                    [](const ExposureReport& one) { return one.status == BuildStatus::failed; });
    return failed && std::all_of(exposures.begin(), exposures.end(), [](const ExposureReport& one) {
               return one.status == BuildStatus::failed;
           });
}

BuildReport build_from_raw(const Site& site, const NightPorts& ports,
                           const std::vector<std::string>& raw_files, int threads,
                           const BuildProgress& progress) {
    NightPlan plan = plan_night(ports.raw, ports.masks, raw_files, threads);
    BuildReport report;
    report.skipped = std::move(plan.skipped);
    NightBuilder builder(site, ports, threads);
    const int total = static_cast<int>(plan.exposures.size());
    progress(0, total);
    for (const PlannedExposure& planned : plan.exposures) {
        report.exposures.push_back(builder.from_raw(planned));
        progress(static_cast<int>(report.exposures.size()), total);
    }
    return report;
}

BuildReport build_from_digests(const Site& site, const NightPorts& ports,
                               const std::vector<std::string>& ids, int threads,
                               const BuildProgress& progress) {
    BuildReport report;
    NightBuilder builder(site, ports, threads);
    const std::vector<std::string> wanted = ids.empty() ? ports.digests.ids() : ids;
    const int total = static_cast<int>(wanted.size());
    int done = 0;
    progress(done, total);
    for (const std::string& id : wanted) {
        try {
            if (const auto digest = ports.digests.load(id)) {
                report.exposures.push_back(builder.from_digest(*digest));
            } else {
                report.skipped.push_back(
                    {id, fmt::format("exposure '{}': no digest was kept", id)});
            }
        } catch (const InputError& error) {
            report.skipped.push_back({id, error.what()});
        }
        progress(++done, total);
    }
    return report;
}

}  // namespace straymark
