#include "night/mask_exposure.h"

#include <algorithm>
#include <fmt/format.h>
#include <mutex>
#include <xxhash.h>

#include "core/parallel.h"
#include "night/mask_tables.h"

namespace straymark {
namespace {

/// Masks in the making keep their pixel buffers from one detector to the next.
class MaskPool {
public:
    DetectorMask take() {
        const std::scoped_lock lock(mutex_);
        if (free_.empty()) {
            return {};
        }
        DetectorMask mask = std::move(free_.back());
        free_.pop_back();
        return mask;
    }
    void give_back(DetectorMask mask) {
        const std::scoped_lock lock(mutex_);
        free_.push_back(std::move(mask));
    }

private:
    std::mutex mutex_;
    std::vector<DetectorMask> free_;
};

struct PixelFractions {
    double pixels = 0.0, flagged = 0.0, marginal = 0.0, unassessed = 0.0;

    void add(const DetectorMask& mask) {
        pixels += static_cast<double>(mask.width) * mask.height;
        double most_unassessed = 0.0;
        for (const ArtifactOutcome& outcome : mask.outcome) {
            flagged += static_cast<double>(outcome.flagged_px);
            marginal += static_cast<double>(outcome.marginal_px);
            most_unassessed = std::max(most_unassessed, static_cast<double>(outcome.unassessed_px));
        }
        unassessed += most_unassessed;
    }
    void add(const PixelFractions& other) {
        pixels += other.pixels;
        flagged += other.flagged;
        marginal += other.marginal;
        unassessed += other.unassessed;
    }
};

/// Prose for a header card. Some readers lose what follows a doubled apostrophe in a string that
/// goes on in CONTINUE cards, so quotes within prose are double ones.
std::string prose(std::string text) {
    std::replace(text.begin(), text.end(), '\'', '"');
    return text;
}

std::vector<MaskCard> primary_cards(const Site& site, const PredictorsInForce& predictors,
                                    const ExposureDigest& digest, const std::string& raw_file) {
    const ExposureHeader& header = digest.header;
    std::vector<MaskCard> cards = {
        {"OBS_ID", header.id, "exposure"},
        {"RAWFILE", raw_file, "raw file that this mask belongs to"},
        {"CAMERA", site.camera.name, "camera"},
        {"FILTER", header.filter, "filter"},
        {"RESULTS", kResultsVersion, "version of the rules that decide a bit"},
        {"CAMDIG", site.camera.digest, "digest of the camera file and its tables"},
    };
    if (!site.defects_digest.empty()) {
        cards.push_back({"DEFDIG", site.defects_digest, "digest of the list of defects"});
    }
    for (const Artifact& artifact : registry()) {
        const PredictorInForce& in_force = predictors[static_cast<std::size_t>(artifact.kind)];
        if (!in_force.product_digest.empty()) {
            cards.push_back({fmt::format("PRODDIG{}", static_cast<int>(artifact.kind) + 1),
                             in_force.product_digest,
                             "digest of the " + artifact.name + " product"});
        }
    }
    int number = 0;
    for (const std::string& input : digest.input_digests) {
        cards.push_back({fmt::format("INPUT{}", ++number), input, "raw file and its digest"});
    }
    number = 0;
    for (const std::string& note : header.notes) {
        cards.push_back({fmt::format("NOTE{}", ++number), prose(note), ""});
    }
    const Pointing& pointing = digest.pointing;
    cards.push_back({"POINTING",
                     pointing.refined ? fmt::format("refined on {} stars", pointing.matched_stars)
                                      : "from the header: " + prose(pointing.reason),
                     "source of the coordinates"});
    return cards;
}

}  // namespace

std::string build_key(const Site& site, const PredictorsInForce& predictors,
                      const std::string& star_digest,
                      const std::vector<std::string>& input_digests) {
    std::string text = fmt::format("results {}\ncamera {}\ndefects {}\nstars {}\n", kResultsVersion,
                                   site.camera.digest, site.defects_digest, star_digest);
    for (const Artifact& artifact : registry()) {
        const auto kind = static_cast<std::size_t>(artifact.kind);
        const PredictorInForce& in_force = predictors[kind];
        text += fmt::format("{} {} {} T {}\n", artifact.name, static_cast<int>(in_force.state),
                            in_force.product_digest, in_force.context.threshold);
    }
    text += fmt::format("background {} template {}\n", site.decision.background_px,
                        site.decision.template_noise);
    text += fmt::format("{}\n", fmt::join(input_digests, "\n"));
    const XXH128_hash_t hash = XXH3_128bits(text.data(), text.size());
    return fmt::format("xxh128:{:016x}{:016x}", hash.high64, hash.low64);
}

double digest_floor_sigma(const PredictorsInForce& predictors) {
    constexpr double kLowest = 3.0;
    constexpr double kHighest = 10.0;
    double floor = kHighest;
    for (const PredictorInForce& in_force : predictors) {
        if (in_force.predictor) {
            floor = std::min(floor, in_force.predictor->needed_floor_sigma(in_force.context));
        }
    }
    return std::clamp(floor, kLowest, kHighest);
}

ExposureMarks::ExposureMarks(const Site& site, const PredictorsInForce& predictors,
                             const ExposureDigest& digest, int threads)
    : site_(site), predictors_(predictors) {
    for (std::size_t kind = 0; kind < predictors.size(); ++kind) {
        if (predictors[kind].predictor) {
            predictions_[kind] =
                predictors[kind].predictor->predict(digest, predictors[kind].context, threads);
        }
    }
}

std::array<DetectorMarks, kArtifactKinds> ExposureMarks::on(int detector) const {
    std::array<DetectorMarks, kArtifactKinds> marks;
    const Detector& described = site_.camera.detectors[static_cast<std::size_t>(detector)];
    for (std::size_t kind = 0; kind < marks.size(); ++kind) {
        if (predictions_[kind]) {
            marks[kind] = predictions_[kind]->marks_on(detector);
            continue;
        }
        marks[kind].assessment.state = predictors_[kind].state;
        marks[kind].assessment.reason = predictors_[kind].reason;
        if (predictors_[kind].state == AssessmentState::unassessed) {
            marks[kind].regions.push_back(
                {{0, 0, described.width, described.height}, predictors_[kind].reason});
        }
    }
    return marks;
}

std::map<std::string, std::vector<int>> detectors_by_file(const Camera& camera,
                                                          const ExposureDigest& digest) {
    std::map<std::string, std::vector<int>> by_file;
    for (std::size_t d = 0; d < digest.detectors.size(); ++d) {
        if (!digest.detectors[d].raw_file.empty() &&
            camera.detectors[d].role == DetectorRole::science) {
            by_file[digest.detectors[d].raw_file].push_back(static_cast<int>(d));
        }
    }
    return by_file;
}

void write_masks(const Site& site, MaskStore& store, const PredictorsInForce& predictors,
                 const ExposureDigest& digest, const std::string& key, int threads,
                 ExposureReport& report) {
    const ExposureMarks marks(site, predictors, digest, threads);
    MaskPool pool;
    for (const auto& file : detectors_by_file(site.camera, digest)) {
        const std::string& raw_file = file.first;
        const std::vector<int>& detectors = file.second;
        const std::unique_ptr<MaskFileWriter> writer = store.begin(raw_file);
        std::vector<MaskFileTables> parts(detectors.size());
        std::vector<PixelFractions> part_fractions(detectors.size());
        parallel_for(static_cast<int>(detectors.size()), threads, [&](int i) {
            const auto at = static_cast<std::size_t>(i);
            const int detector = detectors[at];
            const auto d = static_cast<std::size_t>(detector);
            const DetectorDigest& measured = digest.detectors[d];
            const auto predicted = marks.on(detector);
            const auto defects = site.defects.find(detector);
            DetectorMask mask = pool.take();
            decide(site.camera.detectors[d], measured, predicted,
                   defects == site.defects.end() ? std::vector<PixelBox>{} : defects->second,
                   site.decision, threads, mask);
            append_rows(site, detector, measured, predicted, mask, parts[at]);
            part_fractions[at].add(mask);
            writer->add(i, site.camera.detectors[d].id, mask,
                        measured.header_wcs.empty()
                            ? wcs_cards(site.camera, digest.pointing, detector)
                            : measured.header_wcs);
            pool.give_back(std::move(mask));
        });
        MaskFileTables tables;
        tables.primary = primary_cards(site, predictors, digest, raw_file);
        tables.settings = site.decision;
        PixelFractions fractions;
        for (std::size_t i = 0; i < parts.size(); ++i) {
            const auto append = [](auto& to, auto& from) {
                to.insert(to.end(), std::make_move_iterator(from.begin()),
                          std::make_move_iterator(from.end()));
            };
            append(tables.marks, parts[i].marks);
            append(tables.detection, parts[i].detection);
            append(tables.psfs, parts[i].psfs);
            append(tables.assessed, parts[i].assessed);
            fractions.add(part_fractions[i]);
        }
        tables.summary = {key, fractions.flagged / fractions.pixels,
                          fractions.marginal / fractions.pixels,
                          fractions.unassessed / fractions.pixels};
        writer->finish(tables);
        report.add_mask(store.path_of(raw_file), tables.summary);
    }
}

}  // namespace straymark
