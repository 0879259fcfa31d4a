#include "io/mask_store.h"

#include <algorithm>
#include <array>
#include <cassert>
#include <cctype>
#include <filesystem>
#include <map>
#include <mutex>
#include <string_view>
#include <utility>

#include "core/error.h"
#include "io/files.h"
#include "io/fits_cards.h"
#include "io/fits_writer.h"
#include "io/mask_image.h"
#include "io/mask_tables.h"

namespace straymark::io {
namespace {

constexpr const char* kFormat = "straymark-mask/1";

/// The name without the extension that says "FITS", in any case of letters.
std::string stem_of(const std::string& name) {
    constexpr std::array<std::string_view, 7> kExtensions = {
        ".fits.fz", ".fits.gz", ".fit.gz", ".fits", ".fit", ".fts", ".fz"};
    std::string lower = name;
    std::transform(lower.begin(), lower.end(), lower.begin(),
                   [](unsigned char c) { return static_cast<char>(std::tolower(c)); });
    for (const std::string_view extension : kExtensions) {
        if (lower.size() > extension.size() && lower.ends_with(extension)) {
            return name.substr(0, name.size() - extension.size());
        }
    }
    return name;
}

class FolderMaskWriter : public MaskFileWriter {
public:
    explicit FolderMaskWriter(std::string path) : path_(std::move(path)) {}

    void add(int position, const std::string& detector, const DetectorMask& mask,
             const std::vector<std::string>& wcs_cards) override {
        FitsUnit image = mask_image_unit(detector, mask, wcs_cards);
        const std::lock_guard lock(mutex_);
        const bool added = images_.emplace(position, std::move(image)).second;
        assert(added);
        static_cast<void>(added);
    }

    void finish(const MaskFileTables& tables) override {
        HeaderCards primary;
        primary.add_text("FORMAT", kFormat, "what this file is");
        for (const MaskCard& card : tables.primary) {
            primary.add_text(card.keyword, card.value, card.comment);
        }
        const MaskSummary& summary = tables.summary;
        primary.add_text("BUILDKEY", summary.build_key, "fingerprint of all inputs");
        primary.add_real("FLAGGED", summary.flagged_fraction, "fraction of pixels flagged");
        primary.add_real("MARGINAL", summary.marginal_fraction, "fraction of pixels marginal");
        primary.add_real("UNASSESS", summary.unassessed_fraction, "fraction of pixels unassessed");
        std::vector<FitsUnit> units;
        for (auto& [position, image] : images_) {
            units.push_back(std::move(image));
        }
        images_.clear();
        for (FitsUnit& table : mask_table_units(tables)) {
            units.push_back(std::move(table));
        }
        write_fits(path_, primary, units);
    }

private:
    std::string path_;
    std::mutex mutex_;
    std::map<int, FitsUnit> images_;  // compressed
};

}  // namespace

MaskFolder::MaskFolder(std::string folder) : folder_(std::move(folder)) {}

std::string MaskFolder::path_of(const std::string& raw_file) const {
    const std::string name = std::filesystem::path(raw_file).filename().string();
    return (std::filesystem::path(folder_) / (stem_of(name) + ".mask.fits")).string();
}

std::optional<MaskSummary> MaskFolder::existing(const std::string& raw_file) const {
    const std::string path = path_of(raw_file);
    if (!std::filesystem::is_regular_file(path)) {
        return std::nullopt;
    }
    try {
        const std::optional<FitsHeader> header = whole_primary_header(InputFile(path));
        if (!header) {
            return std::nullopt;
        }
        const std::optional<CardValue> format = header->find("FORMAT");
        const std::optional<CardValue> key = header->find("BUILDKEY");
        const auto fraction = [&](const char* keyword) {
            const std::optional<CardValue> value = header->find(keyword);
            return value ? value->number() : std::nullopt;
        };
        const auto flagged = fraction("FLAGGED");
        const auto marginal = fraction("MARGINAL");
        const auto unassessed = fraction("UNASSESS");
        if (!format || format->text != kFormat || !key || !flagged || !marginal || !unassessed) {
            return std::nullopt;
        }
        return MaskSummary{key->text, *flagged, *marginal, *unassessed};
    } catch (const InputError&) {
        return std::nullopt;  // unreadable: made again, and the writing will say what is wrong
    }
}

std::unique_ptr<MaskFileWriter> MaskFolder::begin(const std::string& raw_file) {
    std::call_once(prepared_, [this] {
        make_folder(folder_);
        remove_left_behind(folder_);
    });
    return std::make_unique<FolderMaskWriter>(path_of(raw_file));
}

}  // namespace straymark::io
