#include "io/digest_store.h"

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <fmt/format.h>
#include <limits>
#include <string_view>
#include <system_error>
#include <tuple>
#include <utility>

#include "core/error.h"
#include "io/digest_tables.h"
#include "io/fits_table.h"
#include "io/fits_writer.h"

namespace straymark::io {
namespace {

constexpr std::string_view kFormat = "straymark-digest/1";
constexpr std::string_view kFormatStem = "straymark-digest/";
constexpr std::string_view kExtension = ".digest.fits";
constexpr std::size_t kLongestName = 160;  // with room for the writer's temporary name
constexpr const char* kNameless = "%";     // stands for an empty id; no escape has this form
constexpr const char* kAdvice = "remove it and build from the raw files again";

/// An id as the stem of a file name.
std::string name_of(const std::string& id) {
    std::string name;
    for (const char c : id) {
        const bool letter = (c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z');
        const bool plain = letter || (c >= '0' && c <= '9') || c == '_' || c == '+';
        const bool inside = (c == '.' || c == '-') && !name.empty();
        name += plain || inside ? std::string(1, c)
                                : fmt::format("%{:02X}", static_cast<unsigned char>(c));
    }
    if (name.size() > kLongestName) {
        const std::string digest = bytes_digest(std::as_bytes(std::span(id)));
        name = name.substr(0, kLongestName / 2) + "~" + digest.substr(digest.find(':') + 1);
    }
    return name.empty() ? kNameless : name;
}

std::string text_of(const FitsHeader& header, const char* keyword) {
    const std::optional<CardValue> value = header.find(keyword);
    return value ? restored_text(value->text) : std::string();
}

/// Is this the primary header of a digest in the format that is read here?
void check_format(const InputFile& file, const FitsHeader& header) {
    const std::string format = text_of(header, "FORMAT");
    if (format == kFormat) {
        return;
    }
    const bool digest = format.starts_with(kFormatStem);
    throw InputError({file.path(), "HDU 0 (primary), keyword FORMAT",
                      digest ? fmt::format("a digest of another version, '{}'", printable(format))
                             : fmt::format("'{}'", printable(format)),
                      fmt::format("'{}'", kFormat), kAdvice});
}

/// A digest's place in time. A damaged file has none: it comes last.
struct DatedId {
    double start_mjd = std::numeric_limits<double>::infinity();
    std::string id;
};

DatedId dated_id(const std::string& path, const std::string& stem) {
    const InputFile file(path);
    if (const std::optional<FitsHeader> header = whole_primary_header(file)) {
        const std::optional<CardValue> start = header->find("MJD-OBS");
        const std::optional<double> mjd = start ? start->number() : std::nullopt;
        return {mjd.value_or(std::numeric_limits<double>::infinity()), text_of(*header, "OBS_ID")};
    }
    DatedId dated;
    dated.id = stem == kNameless ? std::string() : restored_text(stem);
    if (name_of(dated.id) != stem) {
        throw InputError({path, "", "a damaged digest", "a whole one", kAdvice});
    }
    return dated;
}

}  // namespace

DigestFolder::DigestFolder(std::string folder) : folder_(std::move(folder)) {}

std::string DigestFolder::path_of(const std::string& id) const {
    return (std::filesystem::path(folder_) / (name_of(id) + std::string(kExtension))).string();
}

void DigestFolder::save(const ExposureDigest& digest) {
    std::call_once(prepared_, [this] {
        make_folder(folder_);
        remove_left_behind(folder_);
    });
    HeaderCards primary;
    primary.add_text("FORMAT", kFormat, "what this file is");
    primary.add_text("OBS_ID", escaped_text(digest.header.id), "exposure");
    if (std::isfinite(digest.header.start.days)) {
        primary.add_real("MJD-OBS", digest.header.start.days, "start of exposure, UTC");
    }
    write_fits(path_of(digest.header.id), primary, digest_units(digest));
}

std::optional<ExposureDigest> DigestFolder::load(const std::string& id) const {
    const std::string path = path_of(id);
    if (!std::filesystem::exists(path)) {
        return std::nullopt;
    }
    const InputFile file(path);
    const std::vector<FitsHdu> units = sound_units(file);
    check_format(file, read_header(file, units.front()));
    ExposureDigest digest = digest_from(file, units);
    if (digest.header.id != id) {
        throw InputError({path, "table EXPOSURE, column 'id'",
                          fmt::format("'{}'", printable(digest.header.id)),
                          fmt::format("'{}'", printable(id)), kAdvice});
    }
    return digest;
}

std::vector<std::string> DigestFolder::ids() const {
    std::vector<DatedId> dated;
    std::error_code error;
    for (std::filesystem::directory_iterator at(folder_, error), end; !error && at != end;
         at.increment(error)) {
        const std::string name = at->path().filename().string();
        if (!name.starts_with('.') && name.ends_with(kExtension)) {
            dated.push_back(
                dated_id(at->path().string(), name.substr(0, name.size() - kExtension.size())));
        }
    }
    if (error && error != std::errc::no_such_file_or_directory) {
        throw SystemError(folder_, "list", error.value());
    }
    std::sort(dated.begin(), dated.end(), [](const DatedId& a, const DatedId& b) {
        return std::tie(a.start_mjd, a.id) < std::tie(b.start_mjd, b.id);
    });
    std::vector<std::string> ids;
    ids.reserve(dated.size());
    for (DatedId& entry : dated) {
        ids.push_back(std::move(entry.id));
    }
    return ids;
}

}  // namespace straymark::io
