#include "io/score_input.h"

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <cstdint>
#include <filesystem>
#include <fmt/format.h>
#include <optional>
#include <string_view>
#include <system_error>

#include "core/error.h"

namespace straymark::io {
namespace {

constexpr std::string_view kMaskSuffix = ".mask.fits";
constexpr int kFarthestPx = 1'000'000;

score::BitValues bit_values_of(const MaskFile& file, const std::string& kind) {
    const std::map<std::string, std::int32_t> values = file.bit_values();
    const auto value = [&values](const std::string& name) {
        const auto found = values.find(name);
        return found == values.end() ? 0 : found->second;
    };
    // An artifact that is never negative has one bit, of its own name.
    const std::int32_t unsigned_bit = value(kind);
    return {value(kind + "_positive") | unsigned_bit,
            value(kind + "_negative"),
            value(kind + "_unassessed"),
            value("marginal"),
            value("saturated"),
            value("bleed"),
            value("defect")};
}

/// Rows that sum many faint marks stand for no single echo.
bool is_single(const MarkRow& row) {
    return row.count == 1 && !row.source.empty();
}

bool within_reach(const MarkRow& row) {
    const auto inside = [](double value) { return std::abs(value) <= kFarthestPx; };
    return inside(row.x) && inside(row.y) && inside(row.x1) && inside(row.x2) && inside(row.y1) &&
           inside(row.y2);
}

score::FoundMark found_mark(const MarkRow& row, const MaskFile& file) {
    if (!within_reach(row)) {
        throw InputError({file.path(), "MARKS", fmt::format("a mark at ({}, {})", row.x, row.y),
                          "a place on the detector", "make the mask again"});
    }
    return {row.source,
            row.status == "measured",
            row.x - 1.0,
            row.y - 1.0,
            {row.x1 - 1, row.y1 - 1, row.x2, row.y2},
            row.peak_e,
            row.peak_error_e};
}

/// Fails where the mask was made for another background subtraction than the score is asked for.
void check_background(const MaskFile& file, int background_px) {
    const std::optional<int> made_for = file.background_px();
    if (made_for && *made_for != background_px) {
        throw InputError({file.path(), "DETECTION, background_px", fmt::format("{}", *made_for),
                          fmt::format("{}", background_px),
                          fmt::format("score it with --background-px {}", *made_for)});
    }
}

}  // namespace

MaskIndex index_masks(const std::string& folder) {
    namespace fs = std::filesystem;
    std::error_code error;
    std::vector<std::string> paths;
    fs::directory_iterator entry(folder, error);
    for (const fs::directory_iterator end; !error && entry != end; entry.increment(error)) {
        if (entry->path().filename().string().ends_with(kMaskSuffix)) {
            paths.push_back(entry->path().string());
        }
    }
    if (error) {
        throw InputError({folder, "", error.message(), "a folder of masks", "check its name"});
    }
    std::sort(paths.begin(), paths.end());
    MaskIndex index;
    for (const std::string& path : paths) {
        try {
            index.paths[MaskFile(path).exposure()].push_back(path);
        } catch (const InputError& fault) {
            index.faults.emplace_back(fault.what());
        }
    }
    return index;
}

ExposureMasks::ExposureMasks(const std::vector<std::string>& paths, const TruthFile& truth,
                             const std::string& kind, int background_px)
    : kind_(kind) {
    for (const std::string& path : paths) {
        MaskFile file(path);
        check_background(file, background_px);
        score::BitValues values = bit_values_of(file, kind);
        std::vector<MarkRow> marks = file.marks();
        std::vector<DetectionRow> detection = file.detection();
        files_.push_back({std::move(file), values, std::move(marks), std::move(detection)});
        check_detectors(files_.back(), truth);
        for (const MaskFile::Image& image : files_.back().file.images()) {
            file_of_[image.detector] = files_.size() - 1;
        }
    }
}

void ExposureMasks::check_detectors(const Loaded& loaded, const TruthFile& truth) const {
    for (const MaskFile::Image& image : loaded.file.images()) {
        const std::optional<ImageSize> size = truth.size(image.detector, kind_);
        const std::string found =
            fmt::format("detector {} of {} x {} pixels", image.detector, image.width, image.height);
        if (!size) {
            throw InputError({loaded.file.path(), "", found, "the detectors of " + truth.path(),
                              "these are masks of another camera"});
        }
        if (size->width != image.width || size->height != image.height) {
            throw InputError(
                {loaded.file.path(), "", found,
                 fmt::format("{} x {} as in {}", size->width, size->height, truth.path()),
                 "these are masks of another camera"});
        }
        if (const auto twice = file_of_.find(image.detector); twice != file_of_.end()) {
            throw InputError({loaded.file.path(), "", "detector " + image.detector,
                              "detectors that no other mask of this exposure holds",
                              "it is also in " + files_[twice->second].file.path()});
        }
    }
}

score::FoundDetector ExposureMasks::detector(const std::string& id) const {
    score::FoundDetector found;
    const auto holder = file_of_.find(id);
    if (holder == file_of_.end()) {
        return found;
    }
    const Loaded& loaded = files_[holder->second];
    found.present = true;
    found.values = loaded.values;
    found.bits = loaded.file.bits(id);
    for (const MarkRow& row : loaded.marks) {
        if (row.kind == kind_ && row.detector == id && is_single(row)) {
            found.marks.push_back(found_mark(row, loaded.file));
        }
    }
    for (const DetectionRow& row : loaded.detection) {
        if (row.detector == id) {
            found.amplifiers.push_back(
                {id + "/" + row.amplifier, row.state == "ok", row.gain, row.noise_e});
        }
    }
    return found;
}

}  // namespace straymark::io
