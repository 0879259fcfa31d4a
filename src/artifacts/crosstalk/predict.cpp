#include "artifacts/crosstalk/predict.h"

#include <algorithm>
#include <cmath>
#include <cstdlib>
#include <fmt/format.h>
#include <iterator>
#include <limits>
#include <vector>

#include "artifacts/crosstalk/echo.h"
#include "artifacts/crosstalk/params.h"
#include "artifacts/crosstalk/sources.h"
#include "core/parallel.h"

namespace straymark::crosstalk {
namespace {

/// How a detector's detection turns electrons into response.
struct Sensitivity {
    double noise_e = 0.0;          ///< of the victim amplifier, template included
    double root_sum_square = 0.0;  ///< sqrt(sum P^2)
    double weight_sum = 0.0;       ///< at least sum |D|
    double weight_norm = 0.0;      ///< at least sqrt(sum D^2)

    /// Response of a wide plateau of one electron per pixel is at most this.
    [[nodiscard]] double per_plateau_e() const { return weight_sum / (noise_e * root_sum_square); }
    /// Response of a signal whose squares sum to one is at most this (Cauchy and Schwarz).
    [[nodiscard]] double per_norm_e() const { return weight_norm / (noise_e * root_sum_square); }
};

Sensitivity sensitivity_of(const Psf& psf, double noise_e, int background_px) {
    Sensitivity result{noise_e, 0.0, 0.0, 0.0};
    for (const float value : psf.values) {
        result.root_sum_square += static_cast<double>(value) * static_cast<double>(value);
        result.weight_sum += std::abs(static_cast<double>(value));
    }
    result.root_sum_square = std::sqrt(result.root_sum_square);
    result.weight_norm = result.root_sum_square;
    if (background_px > 0) {
        result.weight_sum += 1.0;
        result.weight_norm += 1.0 / background_px;
    }
    return result;
}

/// Errors of faint echoes that respond, on a plateau, with less than this fraction of the threshold
/// are left out of the faint sum's variance.
constexpr double kSpreadTruncation = 0.01;

/// One pair's echoes that are each too faint to list.
struct FaintPair {
    std::shared_ptr<const SourceImage> source;
    EchoPath path;
    EchoTerms terms;              ///< best estimate
    double spread_e = 0.0;        ///< 1 sigma of the echo per source ADU
    float spread_cut_adu = 0.0F;  ///< runs below this peak have errors that do not matter
    float cut_adu = 0.0F;         ///< runs below this peak are left out
    int first_blob = 0;           ///< blobs from here on are the faint ones
    int reach_ticks = 0;          ///< largest |lag|
    bool measured = true;
};

class FaintEchoes : public FaintSum {
public:
    std::vector<FaintPair> pairs;
    std::int64_t marks = 0;

    [[nodiscard]] std::int64_t count() const override { return marks; }
    [[nodiscard]] bool any_unmeasured() const override {
        return std::any_of(pairs.begin(), pairs.end(),
                           [](const FaintPair& pair) { return !pair.measured; });
    }

    void add_to(const FaintWindows& windows) const override {
        for (const FaintPair& pair : pairs) {
            add_pair(pair, windows);
        }
    }

private:
    static void add_pair(const FaintPair& pair, const FaintWindows& windows) {
        const PixelBox box = windows.measured.box.intersected(pair.path.victim->section());
        if (box.empty()) {
            return;
        }
        const ReadoutIndex a = pair.path.victim->readout_from_detector({box.x0, box.y0});
        const ReadoutIndex b = pair.path.victim->readout_from_detector({box.x1 - 1, box.y1 - 1});
        const int tick0 = std::min(a.tick, b.tick) - pair.path.offset_ticks - pair.reach_ticks;
        const int tick1 = std::max(a.tick, b.tick) - pair.path.offset_ticks + pair.reach_ticks;
        const SignalWindow& signal = pair.measured ? windows.measured : windows.unmeasured;
        const SignalWindow& variance =
            pair.measured ? windows.measured_variance : windows.unmeasured_variance;
        for (const SourceRun& run :
             pair.source->runs_between(std::min(a.row, b.row), std::max(a.row, b.row) + 1)) {
            if (run.blob < pair.first_blob || run.peak_adu < pair.cut_adu || run.tick > tick1 ||
                run.tick + run.length <= tick0) {
                continue;
            }
            add_echo(signal, pair.path, *pair.source, run, pair.terms, 1.0);
            if (run.peak_adu >= pair.spread_cut_adu) {
                add_echo_variance(variance, pair.path, *pair.source, run, pair.spread_e);
            }
        }
    }
};

/// A source whose signal is not known, as something that could be saturated.
struct UnknownSource {
    int flat = 0;
    std::string reason;
    std::vector<ReadoutSpan> spans;  ///< empty: all of it
};

class CrosstalkPrediction : public ExposurePrediction {
public:
    CrosstalkPrediction(const Camera& camera, const Params& params, const ExposureDigest& digest,
                        const DetectionContext& context, int threads);
    [[nodiscard]] DetectorMarks marks_on(int detector) const override;

private:
    [[nodiscard]] const AmplifierDigest& digest_of(int flat) const {
        const AmplifierRef ref = params_.ref(flat);
        return digest_.detectors[static_cast<std::size_t>(ref.detector)]
            .amplifiers[static_cast<std::size_t>(ref.amplifier)];
    }
    /// Is any amplifier read in step with one of this detector?
    [[nodiscard]] bool could_receive(int detector) const;
    void add_victim(int victim, DetectorMarks& marks, FaintEchoes& faint) const;
    void add_pair(int victim, int source, const Sensitivity& sensitivity, DetectorMarks& marks,
                  FaintEchoes& faint) const;
    [[nodiscard]] double truncation_of(int victim, int source,
                                       const Sensitivity& sensitivity) const;
    void add_blob_mark(int victim, int source, const SourceBlob& blob, const EchoPath& path,
                       const EchoTerms& terms, DetectorMarks& marks) const;
    void add_unknown(int victim, const Sensitivity& sensitivity, DetectorMarks& marks) const;
    [[nodiscard]] double saturated_level_adu(int flat) const;
    void set_cause(int source, const SourceBlob& blob, MarkCause& cause) const;

    const Camera& camera_;
    const Params& params_;
    const ExposureDigest& digest_;
    DetectionContext context_;
    int threads_;
    std::vector<std::shared_ptr<const SourceImage>> sources_;  ///< by flat index; null: no signal
    std::vector<UnknownSource> unknown_;
};

CrosstalkPrediction::CrosstalkPrediction(const Camera& camera, const Params& params,
                                         const ExposureDigest& digest,
                                         const DetectionContext& context, int threads)
    : camera_(camera),
      params_(params),
      digest_(digest),
      context_(context),
      threads_(threads),
      sources_(static_cast<std::size_t>(params.amplifiers())) {
    parallel_for(params.amplifiers(), threads, [&](int flat) {
        const AmplifierDigest& amplifier = digest_of(flat);
        if (amplifier.state == AmplifierState::ok && !amplifier.runs.empty()) {
            sources_[static_cast<std::size_t>(flat)] =
                std::make_shared<const SourceImage>(make_source_image(amplifier));
        }
    });
    for (int flat = 0; flat < params.amplifiers(); ++flat) {
        const AmplifierDigest& amplifier = digest_of(flat);
        const std::string name = camera.amplifier_name(params.ref(flat));
        if (amplifier.state == AmplifierState::missing ||
            amplifier.state == AmplifierState::unusable) {
            unknown_.push_back({flat, "source " + name + " not known: " + amplifier.reason, {}});
        } else if (amplifier.state == AmplifierState::ok && !amplifier.invalid.empty()) {
            unknown_.push_back(
                {flat, "source " + name + " has pixels without a value", amplifier.invalid});
        }
    }
}

double CrosstalkPrediction::saturated_level_adu(int flat) const {
    const Amplifier& amplifier = camera_.amplifier(params_.ref(flat));
    return std::max(0.0, amplifier.saturation_adu - digest_of(flat).bias_adu);
}

template <typename T>
void append(std::vector<T>& to, std::vector<T>&& from) {
    to.insert(to.end(), std::make_move_iterator(from.begin()), std::make_move_iterator(from.end()));
}

void join(DetectorMarks& to, DetectorMarks&& from) {
    append(to.marks, std::move(from.marks));
    append(to.regions, std::move(from.regions));
    to.assessment.truncation_response =
        std::max(to.assessment.truncation_response, from.assessment.truncation_response);
}

void join(FaintEchoes& to, FaintEchoes&& from) {
    append(to.pairs, std::move(from.pairs));
    to.marks += from.marks;
}

bool CrosstalkPrediction::could_receive(int detector) const {
    const auto& amplifiers = camera_.detectors[static_cast<std::size_t>(detector)].amplifiers;
    for (int a = 0; a < static_cast<int>(amplifiers.size()); ++a) {
        if (!params_.sources_of(params_.flat({detector, a})).empty()) {
            return true;
        }
    }
    return false;
}

DetectorMarks CrosstalkPrediction::marks_on(int detector) const {
    const Detector& camera_detector = camera_.detectors[static_cast<std::size_t>(detector)];
    const DetectorDigest& digest = digest_.detectors[static_cast<std::size_t>(detector)];
    DetectorMarks marks;
    marks.assessment = {AssessmentState::assessed, "", params_.calibration()};
    const PixelBox whole{0, 0, camera_detector.width, camera_detector.height};
    const bool blind = digest.psf.source == PsfSource::none && could_receive(detector);
    if (!digest.present || blind) {
        marks.assessment.state = AssessmentState::unassessed;
        marks.assessment.reason = !digest.present ? digest.reason
                                                  : "no point-spread function: too few stars "
                                                    "on this exposure to measure one";
        marks.regions.push_back({whole, marks.assessment.reason});
        return marks;
    }
    // Victims are independent: each fills its own part, and the parts are joined in order.
    const auto victims = static_cast<int>(camera_detector.amplifiers.size());
    std::vector<DetectorMarks> parts(static_cast<std::size_t>(victims));
    std::vector<FaintEchoes> faint_parts(static_cast<std::size_t>(victims));
    parallel_for(victims, threads_, [&](int a) {
        add_victim(params_.flat({detector, a}), parts[static_cast<std::size_t>(a)],
                   faint_parts[static_cast<std::size_t>(a)]);
    });
    auto faint = std::make_unique<FaintEchoes>();
    for (int a = 0; a < victims; ++a) {
        join(marks, std::move(parts[static_cast<std::size_t>(a)]));
        join(*faint, std::move(faint_parts[static_cast<std::size_t>(a)]));
    }
    if (!faint->pairs.empty()) {
        marks.faint = std::move(faint);
    }
    if (!marks.regions.empty()) {
        marks.assessment.state = AssessmentState::partly;
        marks.assessment.reason = marks.regions.front().reason;
    }
    return marks;
}

void CrosstalkPrediction::add_victim(int victim, DetectorMarks& marks, FaintEchoes& faint) const {
    const AmplifierRef ref = params_.ref(victim);
    const Amplifier& amplifier = camera_.amplifier(ref);
    const AmplifierDigest& digest = digest_of(victim);
    if (digest.state == AmplifierState::dead) {
        return;
    }
    if (digest.state != AmplifierState::ok) {
        marks.regions.push_back(
            {amplifier.readout.section(), camera_.amplifier_name(ref) + ": " + digest.reason});
        return;
    }
    const double noise_e =
        digest.noise_adu * amplifier.gain_e_per_adu * std::hypot(1.0, context_.template_noise);
    const Psf& psf = digest_.detectors[static_cast<std::size_t>(ref.detector)].psf;
    const Sensitivity sensitivity = sensitivity_of(psf, noise_e, context_.background_px);
    for (const int source : params_.sources_of(victim)) {
        if (sources_[static_cast<std::size_t>(source)]) {
            add_pair(victim, source, sensitivity, marks, faint);
        }
        marks.assessment.truncation_response = std::max(marks.assessment.truncation_response,
                                                        truncation_of(victim, source, sensitivity));
    }
    add_unknown(victim, sensitivity, marks);
}

double CrosstalkPrediction::truncation_of(int victim, int source,
                                          const Sensitivity& sensitivity) const {
    const Pair& pair = params_.pair(victim, source);
    const double gain = camera_.amplifier(params_.ref(victim)).gain_e_per_adu;
    const double floor_adu = digest_of(source).floor_adu;
    const double left_out_e =
        EchoTerms::estimate(pair, params_.extras(pair), gain).bound(floor_adu);
    return std::max(kTruncation * context_.threshold, left_out_e * sensitivity.per_plateau_e());
}

void CrosstalkPrediction::add_pair(int victim, int source, const Sensitivity& sensitivity,
                                   DetectorMarks& marks, FaintEchoes& faint) const {
    const Pair& pair = params_.pair(victim, source);
    const PairExtras* extras = params_.extras(pair);
    const Amplifier& amplifier = camera_.amplifier(params_.ref(victim));
    const double gain = amplifier.gain_e_per_adu;
    const EchoPath path{&amplifier.readout, params_.offset_ticks(victim, source)};
    const EchoTerms terms = EchoTerms::estimate(pair, extras, gain);
    const auto& image = sources_[static_cast<std::size_t>(source)];
    const double two_errors = 2.0 * static_cast<double>(pair.error) * gain;
    const auto bound_e = [&](double level) { return terms.bound(level) + two_errors * level; };
    if (bound_e(static_cast<double>(image->largest_adu)) == 0.0) {
        return;
    }
    // A blob's echo has no larger norm than the blob times the steepest coupling that occurs in it.
    const auto largest = static_cast<double>(image->largest_adu);
    const double listed_norm_adu =
        0.25 * context_.threshold * largest / (sensitivity.per_norm_e() * bound_e(largest));
    std::size_t first_faint = 0;
    while (first_faint < image->blobs.size() &&
           image->blobs[first_faint].norm_adu >= listed_norm_adu) {
        add_blob_mark(victim, source, image->blobs[first_faint], path, terms, marks);
        ++first_faint;
    }
    const auto brightest_faint = static_cast<double>(image->peak_from[first_faint]);
    if (brightest_faint <= 0.0) {
        return;
    }
    const double cut_adu = kTruncation * context_.threshold * brightest_faint /
                           (sensitivity.per_plateau_e() * bound_e(brightest_faint));
    if (brightest_faint < cut_adu) {
        return;
    }
    int reach = 0;
    for (const Lag& lag : terms.lags) {
        reach = std::max(reach, std::abs(lag.ticks));
    }
    faint.marks += static_cast<std::int64_t>(image->blobs.size() - first_faint);
    const double spread_e = static_cast<double>(pair.error) * gain;
    const double spread_cut_adu = spread_e > 0.0 ? kSpreadTruncation * context_.threshold /
                                                       (sensitivity.per_plateau_e() * spread_e)
                                                 : 0.0;
    faint.pairs.push_back({image, path, terms, spread_e, static_cast<float>(spread_cut_adu),
                           static_cast<float>(cut_adu), static_cast<int>(first_faint), reach,
                           pair.known()});
}

/// The independent errors of a pair, each as the terms of one sigma.
std::vector<EchoTerms> error_terms(const Pair& pair, const PairExtras* extras, double gain) {
    const bool own_clipped = extras != nullptr && extras->clipped.has_value();
    std::vector<EchoTerms> modes;
    EchoTerms lag0;
    lag0.linear = static_cast<double>(pair.error) * gain;
    lag0.clipped_linear = own_clipped ? 0.0 : lag0.linear;
    modes.push_back(lag0);
    if (own_clipped) {
        EchoTerms clipped;
        clipped.clipped_linear = extras->clipped->error * gain;
        modes.push_back(clipped);
    }
    if (extras != nullptr && extras->bend) {
        EchoTerms bend;
        bend.bend = &*extras->bend;
        bend.bend_scale = extras->bend->relative_error * gain;
        bend.clipped_bend_scale = own_clipped ? 0.0 : bend.bend_scale;
        modes.push_back(bend);
    }
    if (extras != nullptr) {
        for (const Lag& lag : extras->lags) {
            EchoTerms shifted;
            shifted.lags.push_back({lag.ticks, lag.error * gain, 0.0});
            modes.push_back(shifted);
        }
    }
    return modes;
}

void CrosstalkPrediction::add_blob_mark(int victim, int source, const SourceBlob& blob,
                                        const EchoPath& path, const EchoTerms& terms,
                                        DetectorMarks& marks) const {
    constexpr std::uint64_t kModesPerPair = 256;
    const Pair& pair = params_.pair(victim, source);
    const PairExtras* extras = params_.extras(pair);
    const double gain = camera_.amplifier(params_.ref(victim)).gain_e_per_adu;
    const auto& image = sources_[static_cast<std::size_t>(source)];
    auto signal = std::make_shared<const EchoShape>(image, blob, path, terms);
    if (signal->bounds().empty()) {
        return;  // the whole echo falls into prescan or overscan
    }
    Mark mark;
    mark.kind = ArtifactKind::crosstalk;
    mark.measured = pair.known();
    const std::uint64_t group =
        (static_cast<std::uint64_t>(victim) * static_cast<std::uint64_t>(params_.amplifiers()) +
         static_cast<std::uint64_t>(source)) *
        kModesPerPair;
    const double lag0 = static_cast<double>(pair.coefficient);
    if (extras == nullptr && lag0 != 0.0) {
        const double relative = std::abs(static_cast<double>(pair.error) / lag0);
        mark.errors.push_back({group, relative, nullptr});
        mark.strength_e = signal->total_e();
        mark.strength_error_e = relative * std::abs(mark.strength_e);
    } else {
        double variance = 0.0;
        const std::vector<EchoTerms> modes = error_terms(pair, extras, gain);
        for (std::size_t i = 0; i < modes.size(); ++i) {
            auto shape = std::make_shared<const EchoShape>(image, blob, path, modes[i]);
            const double total = shape->total_e();
            variance += total * total;
            mark.errors.push_back({group + i, 0.0, std::move(shape)});
        }
        mark.strength_e = signal->total_e();
        mark.strength_error_e = std::sqrt(variance);
    }
    if (lag0 != 0.0 || extras != nullptr) {
        mark.signal = std::move(signal);
    }
    set_cause(source, blob, mark.cause);
    marks.marks.push_back(std::move(mark));
}

void CrosstalkPrediction::set_cause(int source, const SourceBlob& blob, MarkCause& cause) const {
    const AmplifierRef ref = params_.ref(source);
    const DetectorPixel at = camera_.amplifier(ref).readout.detector_from_readout(blob.peak);
    cause.source = camera_.amplifier_name(ref);
    cause.source_x_px = at.x;
    cause.source_y_px = at.y;
    cause.text = fmt::format("echo of {} at ({}, {}), {:.0f} ADU", cause.source, at.x + 1, at.y + 1,
                             blob.peak_adu);
}

void CrosstalkPrediction::add_unknown(int victim, const Sensitivity& sensitivity,
                                      DetectorMarks& marks) const {
    const ReadoutGeometry& readout = camera_.amplifier(params_.ref(victim)).readout;
    const double gain = camera_.amplifier(params_.ref(victim)).gain_e_per_adu;
    for (const UnknownSource& unknown : unknown_) {
        if (!params_.in_step(victim, unknown.flat)) {
            continue;
        }
        const Pair& pair = params_.pair(victim, unknown.flat);
        const double level = saturated_level_adu(unknown.flat);
        const double bound_e = EchoTerms::estimate(pair, params_.extras(pair), gain).bound(level) +
                               2.0 * static_cast<double>(pair.error) * gain * level;
        if (bound_e * sensitivity.per_plateau_e() < context_.threshold) {
            continue;  // even a saturated source would not matter here
        }
        constexpr std::size_t kMostSpans = 256;
        if (unknown.spans.empty() || unknown.spans.size() > kMostSpans) {
            marks.regions.push_back({readout.section(), unknown.reason});
            continue;
        }
        const int radius =
            digest_.detectors[static_cast<std::size_t>(params_.ref(victim).detector)].psf.radius;
        for (const ReadoutSpan& span : unknown.spans) {
            const int tick = span.tick + params_.offset_ticks(victim, unknown.flat);
            const DetectorPixel a = readout.detector_from_readout({tick, span.row});
            const DetectorPixel b =
                readout.detector_from_readout({tick + span.length - 1, span.row});
            const PixelBox box{std::min(a.x, b.x), std::min(a.y, b.y), std::max(a.x, b.x) + 1,
                               std::max(a.y, b.y) + 1};
            const PixelBox reached = box.grown(radius).intersected(readout.section());
            if (!reached.empty()) {
                marks.regions.push_back({reached, unknown.reason});
            }
        }
    }
}

class CrosstalkPredictor : public Predictor {
public:
    CrosstalkPredictor(const Camera& camera, const Product& product)
        : camera_(camera), params_(Params::from_product(camera, product)) {}

    [[nodiscard]] double needed_floor_sigma(const DetectionContext& context) const override {
        // The noise-equivalent area is not known before the pixels are read: that of bad seeing.
        constexpr double kLargestRootArea = 10.0;
        const double coupling = params_.largest_coupling();
        return coupling > 0.0 ? kTruncation * context.threshold / (kLargestRootArea * coupling)
                              : std::numeric_limits<double>::infinity();
    }

    [[nodiscard]] std::unique_ptr<ExposurePrediction> predict(const ExposureDigest& digest,
                                                              const DetectionContext& context,
                                                              int threads) const override {
        return std::make_unique<CrosstalkPrediction>(camera_, params_, digest, context, threads);
    }

private:
    const Camera& camera_;
    Params params_;
};

}  // namespace

std::unique_ptr<Predictor> make_predictor(const Camera& camera, const Product& product) {
    return std::make_unique<CrosstalkPredictor>(camera, product);
}

}  // namespace straymark::crosstalk
