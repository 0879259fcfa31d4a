#include "io/truth_file.h"

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <filesystem>
#include <fmt/format.h>
#include <optional>
#include <string_view>
#include <system_error>
#include <utility>

#include "core/error.h"

namespace straymark::io {
namespace {

constexpr const char* kFormat = "straymark-truth/1";
constexpr std::string_view kFileSuffix = ".truth.fits";
constexpr std::string_view kPsfSuffix = ".psf";
constexpr double kFarthestPx = 1e6;

std::string detector_of(const std::string& amplifier_name) {
    return amplifier_name.substr(0, amplifier_name.find('/'));
}

}  // namespace

TruthFile::TruthFile(const std::string& path) : file_(path) {
    const std::optional<std::string> format = file_.primary_text("FORMAT");
    if (format != kFormat) {
        file_.refuse("primary header, FORMAT", format.value_or("nothing"), kFormat,
                     "give a truth file that `straymark simulate` wrote");
    }
    exposure_ = file_.primary_text("OBS_ID").value_or("");
    for (const FitsHdu& unit : file_.units()) {
        if (unit.name.ends_with(kPsfSuffix)) {
            detectors_.push_back(unit.name.substr(0, unit.name.size() - kPsfSuffix.size()));
        }
    }
    if (exposure_.empty() || detectors_.empty()) {
        file_.refuse("", exposure_.empty() ? "no OBS_ID" : "no detector",
                     "an exposure of some detectors", "simulate it again");
    }
    read_amplifiers();
    read_echoes();
}

void TruthFile::read_amplifiers() {
    const BinaryTable table = file_.table("AMPLIFIERS");
    const std::vector<std::string> detector = table.strings("detector");
    const std::vector<std::string> amplifier = table.strings("amplifier");
    const std::vector<double> x1 = number_column(table, "x1");
    const std::vector<double> x2 = number_column(table, "x2");
    const std::vector<double> y1 = number_column(table, "y1");
    const std::vector<double> y2 = number_column(table, "y2");
    const std::vector<double> gain = number_column(table, "gain");
    const std::vector<double> noise = number_column(table, "noise_e");
    for (std::size_t i = 0; i < detector.size(); ++i) {
        const std::string name = detector[i] + "/" + amplifier[i];
        for (const double edge : {x1[i], x2[i], y1[i], y2[i]}) {
            if (!(edge >= 1.0 && edge <= kFarthestPx)) {
                file_.refuse("AMPLIFIERS, " + name, fmt::format("an edge at {}", edge),
                             "a pixel of the detector", "simulate it again");
            }
        }
        if (!(gain[i] > 0.0) || !(noise[i] > 0.0)) {
            file_.refuse("AMPLIFIERS, " + name,
                         fmt::format("gain {}, noise_e {}", gain[i], noise[i]), "both above 0",
                         "simulate it again");
        }
        amplifiers_[detector[i]].push_back(
            {name,
             {static_cast<int>(x1[i]) - 1, static_cast<int>(y1[i]) - 1, static_cast<int>(x2[i]),
              static_cast<int>(y2[i])},
             gain[i],
             noise[i]});
    }
}

void TruthFile::read_echoes() {
    const BinaryTable table = file_.table("ECHOES");
    std::vector<std::string> victim = table.strings("victim");
    std::vector<std::string> source = table.strings("source");
    const std::vector<double> x = number_column(table, "x");
    const std::vector<double> y = number_column(table, "y");
    const std::vector<double> total = number_column(table, "total_e");
    const std::vector<double> peak = number_column(table, "peak_e");
    for (std::size_t i = 0; i < victim.size(); ++i) {
        if (std::max(std::abs(x[i]), std::abs(y[i])) > kFarthestPx) {
            file_.refuse(fmt::format("ECHOES, row {}", i + 1),
                         fmt::format("a peak at ({}, {})", x[i], y[i]), "a place on a detector",
                         "simulate it again");
        }
        echoes_[detector_of(victim[i])].push_back({std::move(victim[i]), std::move(source[i]),
                                                   x[i] - 1.0, y[i] - 1.0, total[i], peak[i]});
    }
}

score::TrueDetector TruthFile::detector(const std::string& id, const std::string& kind) const {
    const std::optional<ImageSize> shape = size(id, kind);
    if (!shape) {
        file_.refuse("", "no image of " + id + "." + kind, "one of two axes", "simulate it again");
    }
    score::TrueDetector detector;
    detector.id = id;
    detector.width = shape->width;
    detector.height = shape->height;
    if (const auto found = amplifiers_.find(id); found != amplifiers_.end()) {
        detector.amplifiers = found->second;
    }
    check_cover(detector);
    if (const auto found = echoes_.find(id); found != echoes_.end()) {
        detector.echoes = found->second;
    }
    detector.psf = psf(id);
    detector.signal_e = file_.float_image(file_.required(id + "." + kind));
    if (!std::all_of(detector.signal_e.begin(), detector.signal_e.end(),
                     [](float value) { return std::isfinite(value); })) {
        file_.refuse(id + "." + kind, "pixels that are not finite", "electrons",
                     "simulate it again");
    }
    return detector;
}

std::optional<ImageSize> TruthFile::size(const std::string& id, const std::string& kind) const {
    const FitsHdu* unit = file_.find(id + "." + kind);
    return unit == nullptr ? std::nullopt : image_size(*unit);
}

score::TruePsf TruthFile::psf(const std::string& id) const {
    const std::string name = id + std::string(kPsfSuffix);
    const FitsHdu& unit = file_.required(name);
    const ImageSize size = image_size(unit).value_or(ImageSize{});
    constexpr int kLargestPsf = 1001;
    if (size.width != size.height || size.width % 2 == 0 || size.width > kLargestPsf) {
        file_.refuse(name, fmt::format("{} x {} pixels", size.width, size.height),
                     fmt::format("a square of an odd side up to {}", kLargestPsf),
                     "simulate it again");
    }
    score::TruePsf psf{size.width / 2, file_.float_image(unit)};
    double sum = 0.0;
    bool negative = false;
    for (const float value : psf.values) {
        sum += static_cast<double>(value);
        negative = negative || !(value >= 0.0F);
    }
    constexpr double kNormalised = 1e-4;  // single precision over some thousand pixels
    if (negative || !(std::abs(sum - 1.0) <= kNormalised)) {
        file_.refuse(name,
                     fmt::format("values that sum to {}{}", sum, negative ? ", some below 0" : ""),
                     "a point-spread function that sums to 1", "simulate it again");
    }
    return psf;
}

void TruthFile::check_cover(const score::TrueDetector& detector) const {
    const PixelBox whole{0, 0, detector.width, detector.height};
    std::int64_t area = 0;
    bool apart = true;
    for (const score::TrueAmplifier& amplifier : detector.amplifiers) {
        const PixelBox& box = amplifier.section;
        area += std::int64_t{box.width()} * box.height();
        apart =
            apart && !box.empty() && box.intersected(whole) == box &&
            std::none_of(detector.amplifiers.begin(), detector.amplifiers.end(),
                         [&](const score::TrueAmplifier& other) {
                             return &other != &amplifier && !other.section.intersected(box).empty();
                         });
    }
    if (!apart || area != std::int64_t{detector.width} * detector.height) {
        file_.refuse(
            "AMPLIFIERS, detector " + detector.id,
            fmt::format("{} sections that do not tile it", detector.amplifiers.size()),
            fmt::format("sections that tile {} x {} pixels", detector.width, detector.height),
            "simulate it again");
    }
}

std::vector<std::string> truth_files_in(const std::string& folder) {
    namespace fs = std::filesystem;
    std::vector<std::string> paths;
    for (const fs::path& place : {fs::path(folder), fs::path(folder) / "truth"}) {
        std::error_code error;
        for (fs::directory_iterator entry(place, error), end; !error && entry != end;
             entry.increment(error)) {
            if (entry->path().filename().string().ends_with(kFileSuffix)) {
                paths.push_back(entry->path().string());
            }
        }
        if (!paths.empty()) {
            break;
        }
    }
    if (paths.empty()) {
        throw InputError({folder, "", "no *.truth.fits", "the truth of a simulated night",
                          "give the folder that `straymark simulate` wrote"});
    }
    std::sort(paths.begin(), paths.end());
    return paths;
}

}  // namespace straymark::io
