#include "io/raw_reader.h"

#include <algorithm>
#include <cerrno>
#include <deque>
#include <fmt/format.h>
#include <map>
#include <mutex>
#include <optional>
#include <sys/stat.h>
#include <utility>

#include "core/error.h"
#include "io/files.h"
#include "io/fits_pixels.h"
#include "io/fits_scan.h"
#include "io/gzip.h"
#include "io/header_reader.h"
#include "io/raw_placement.h"
#include "io/raw_wcs.h"

namespace straymark::io {
namespace {

/// What tells that a file is still the one it was.
struct FileIdentity {
    std::uint64_t device = 0, inode = 0;
    std::int64_t size = 0, modified_s = 0, modified_ns = 0;
    friend bool operator==(const FileIdentity&, const FileIdentity&) = default;
};

FileIdentity identity_of(const std::string& path) {
    struct stat status {};
    if (::stat(path.c_str(), &status) != 0) {
        return {};
    }
    return {status.st_dev, status.st_ino, status.st_size, status.st_mtim.tv_sec,
            status.st_mtim.tv_nsec};
}

void refuse_change(const std::string& path, const FileIdentity& before, const FileIdentity& now) {
    if (before == now) {
        return;
    }
    throw InputError(
        {path, "",
         now.size != before.size ? fmt::format("{} bytes, then {}", before.size, now.size)
                                 : std::string("bytes that were written while it was read"),
         "a file that no longer changes", "it is still growing: wait until it is complete"});
}

/// An open raw file, expanded where it was gzip, and its structure.
struct OpenedFile {
    FileIdentity identity;
    InputFile bytes;
    FitsStructure structure;
};

/// More than any exposure of this camera expands to: headers and tables aside, 8-byte pixels and
/// as much again for prescan and overscan along both axes.
std::int64_t expansion_limit(const Camera& camera) {
    std::int64_t bytes = std::int64_t{64} << 20;
    for (const Detector& detector : camera.detectors) {
        bytes += std::int64_t{32} * detector.width * detector.height;
    }
    return bytes;
}

std::shared_ptr<const OpenedFile> opened(const Camera& camera, const std::string& path) {
    const FileIdentity identity = identity_of(path);
    InputFile file(path);
    InputFile bytes = is_gzip(file) ? expanded(file, expansion_limit(camera)) : std::move(file);
    FitsStructure structure = scan_fits(bytes);
    return std::make_shared<const OpenedFile>(
        OpenedFile{identity, std::move(bytes), std::move(structure)});
}

/// The box of the image that holds all that an amplifier needs.
PixelBox needed_box(const AmplifierPlacement& placement) {
    PixelBox box = placement.data;
    if (placement.bias) {
        box = box.united(*placement.bias);
    }
    if (placement.prescan) {
        box = box.united(*placement.prescan);
    }
    return box;
}

PixelBox shifted(const PixelBox& box, const PixelBox& origin) {
    return {box.x0 - origin.x0, box.y0 - origin.y0, box.x1 - origin.x0, box.y1 - origin.y0};
}

class RawDetectorFrame final : public DetectorFrame {
public:
    RawDetectorFrame(const Camera& camera, int detector, std::shared_ptr<const OpenedFile> file,
                     std::string decoder)
        : camera_(camera),
          detector_(detector),
          file_(std::move(file)),
          decoder_(std::move(decoder)),
          placement_(placed_detector(camera, detector, file_->bytes, file_->structure)) {}

    void read(int amplifier, AmplifierFrame& frame) override;
    [[nodiscard]] std::vector<std::string> wcs_cards() const override {
        return detector_wcs_cards(camera_.detectors[static_cast<std::size_t>(detector_)],
                                  placement_, file_->bytes, file_->structure);
    }
    [[nodiscard]] const std::string& path() const override { return file_->bytes.path(); }

private:
    void read_decoded(const FitsHdu& hdu, bool shared, const PixelBox& box, std::span<float> out);

    const Camera& camera_;
    int detector_;
    std::shared_ptr<const OpenedFile> file_;
    std::string decoder_;
    DetectorPlacement placement_;
    std::mutex mutex_;                                  ///< guards shared_image_
    std::shared_ptr<const DecodedImage> shared_image_;  ///< of all amplifiers, decoded once
};

void RawDetectorFrame::read(int amplifier, AmplifierFrame& frame) {
    const auto index = static_cast<std::size_t>(amplifier);
    const std::optional<AmplifierPlacement>& placement = placement_.amplifiers.at(index);
    if (!placement) {
        throw InputError({path(), camera_.amplifier_name({detector_, amplifier}),
                          placement_.missing[index], "pixels of this amplifier",
                          "it is left out of this exposure"});
    }
    const FitsHdu& hdu = file_->structure.hdus[static_cast<std::size_t>(placement->hdu)];
    const PixelBox box = needed_box(*placement);
    frame.width = box.width();
    frame.height = box.height();
    frame.pixels.resize(static_cast<std::size_t>(box.width()) *
                        static_cast<std::size_t>(box.height()));
    if (hdu.kind == HduKind::compressed_image) {
        read_decoded(hdu, placement->shared, box, frame.pixels);
    } else {
        read_pixels(file_->bytes, hdu, box, frame.pixels);
    }
    refuse_change(path(), file_->identity, identity_of(path()));
    frame.data = shifted(placement->data, box);
    const auto set = [&](std::vector<PixelBox>& boxes, const std::optional<PixelBox>& strip) {
        boxes.clear();
        if (strip) {
            boxes.push_back(shifted(*strip, box));
        }
    };
    set(frame.overscan, placement->bias);
    set(frame.prescan, placement->prescan);
    frame.origin = placement->origin;
    frame.tick_per_column = placement->tick_per_column;
    frame.row_per_column = placement->row_per_column;
    frame.tick_per_row = placement->tick_per_row;
    frame.row_per_row = placement->row_per_row;
}

void RawDetectorFrame::read_decoded(const FitsHdu& hdu, bool shared, const PixelBox& box,
                                    std::span<float> out) {
    if (!shared) {
        decode_isolated(file_->bytes, hdu, decoder_).read(box, out);
        return;
    }
    std::shared_ptr<const DecodedImage> image;
    {
        const std::lock_guard lock(mutex_);
        if (!shared_image_) {
            shared_image_ =
                std::make_shared<const DecodedImage>(decode_isolated(file_->bytes, hdu, decoder_));
        }
        image = shared_image_;
    }
    image->read(box, out);
}

class FitsRawReader final : public RawReader {
public:
    FitsRawReader(const Camera& camera, std::string decoder)
        : camera_(camera), decoder_(std::move(decoder)) {}

    [[nodiscard]] RawFile inspect(const std::string& path) const override;
    [[nodiscard]] std::unique_ptr<DetectorFrame> open(const RawFile& file,
                                                      int detector) const override;

private:
    [[nodiscard]] std::shared_ptr<const OpenedFile> file_of(const std::string& path) const;
    void remember(const std::shared_ptr<const OpenedFile>& file) const;

    // The detectors of a file are opened one after the other; its structure is read once.
    static constexpr std::size_t kMostOpen = 4;

    const Camera& camera_;
    std::string decoder_;
    mutable std::mutex mutex_;  ///< guards all below
    mutable std::deque<std::shared_ptr<const OpenedFile>> open_;
    mutable std::map<std::string, FileIdentity> inspected_;
};

/// Headers in the order in which keywords are sought: primary first (docs/raw_files.md).
std::vector<PlacedHeader> headers_of(const OpenedFile& file,
                                     const std::vector<DetectorPlacement>& placements) {
    const std::vector<FitsHdu>& hdus = file.structure.hdus;
    std::vector<int> numbers{0};
    for (const FitsHdu& hdu : hdus) {
        if (hdu.was_primary) {
            numbers.push_back(hdu.number);
        }
    }
    // One HDU of each detector stands for all: they repeat what belongs to the exposure.
    for (const DetectorPlacement& placement : placements) {
        const auto first =
            std::find_if(placement.amplifiers.begin(), placement.amplifiers.end(),
                         [](const auto& amplifier) { return amplifier.has_value(); });
        if (first != placement.amplifiers.end() &&
            std::find(numbers.begin(), numbers.end(), (*first)->hdu) == numbers.end()) {
            numbers.push_back((*first)->hdu);
        }
    }
    std::vector<PlacedHeader> headers;
    for (const int number : numbers) {
        const FitsHdu& hdu = hdus[static_cast<std::size_t>(number)];
        headers.push_back({place_of(hdu), read_header(file.bytes, hdu)});
    }
    return headers;
}

void note_missing(const Camera& camera, int detector, const DetectorPlacement& placement,
                  std::vector<std::string>& notes) {
    for (std::size_t i = 0; i < placement.missing.size(); ++i) {
        if (!placement.missing[i].empty()) {
            notes.push_back(camera.amplifier_name({detector, static_cast<int>(i)}) + ": " +
                            placement.missing[i]);
        }
    }
    notes.insert(notes.end(), placement.notes.begin(), placement.notes.end());
}

void note_unclaimed(const Camera& camera, const FitsStructure& structure,
                    std::vector<std::string>& notes) {
    const std::vector<bool> claimed = claimed_hdus(camera, structure);
    for (const FitsHdu& hdu : structure.hdus) {
        if (hdu.has_pixels() && !claimed[static_cast<std::size_t>(hdu.number)]) {
            notes.push_back(place_of(hdu) + ": an image that the camera file does not know");
        }
        if (hdu.kind == HduKind::compressed_image && !hdu.data_sum) {
            notes.push_back(place_of(hdu) + ": no DATASUM, so that damage may go unseen");
        }
    }
}

RawFile FitsRawReader::inspect(const std::string& path) const {
    const std::shared_ptr<const OpenedFile> file = opened(camera_, path);
    RawFile raw;
    raw.path = path;
    raw.notes = file->structure.notes;
    std::vector<DetectorPlacement> present;
    for (int detector = 0; detector < static_cast<int>(camera_.detectors.size()); ++detector) {
        DetectorPlacement placement =
            placed_detector(camera_, detector, file->bytes, file->structure);
        if (placement.present()) {
            raw.detectors.push_back(detector);
            note_missing(camera_, detector, placement, raw.notes);
            present.push_back(std::move(placement));
        }
    }
    if (raw.detectors.empty()) {
        throw InputError({path, "", "no image of this camera",
                          fmt::format("HDUs named like {}", hdu_name(camera_, {0, 0})),
                          "check `raw: {hdu: ...}` in the camera file"});
    }
    note_unclaimed(camera_, file->structure, raw.notes);
    raw.header = read_exposure_header(camera_, path, headers_of(*file, present));
    raw.digest = file_digest(InputFile(path));
    refuse_change(path, file->identity, identity_of(path));
    remember(file);
    return raw;
}

void FitsRawReader::remember(const std::shared_ptr<const OpenedFile>& file) const {
    const std::string& path = file->bytes.path();
    const std::lock_guard lock(mutex_);
    inspected_[path] = file->identity;
    std::erase_if(open_, [&](const auto& other) { return other->bytes.path() == path; });
    open_.push_front(file);
    if (open_.size() > kMostOpen) {
        open_.pop_back();
    }
}

std::shared_ptr<const OpenedFile> FitsRawReader::file_of(const std::string& path) const {
    std::optional<FileIdentity> inspected;
    {
        const std::lock_guard lock(mutex_);
        if (const auto found = inspected_.find(path); found != inspected_.end()) {
            inspected = found->second;
            refuse_change(path, *inspected, identity_of(path));
        }
        for (const std::shared_ptr<const OpenedFile>& file : open_) {
            if (file->bytes.path() == path && inspected == file->identity) {
                return file;
            }
        }
    }
    std::shared_ptr<const OpenedFile> file = opened(camera_, path);
    refuse_change(path, inspected.value_or(file->identity), file->identity);
    remember(file);
    return file;
}

std::unique_ptr<DetectorFrame> FitsRawReader::open(const RawFile& file, int detector) const {
    return std::make_unique<RawDetectorFrame>(camera_, detector, file_of(file.path), decoder_);
}

}  // namespace

std::unique_ptr<RawReader> make_raw_reader(const Camera& camera, std::string decoder) {
    return std::make_unique<FitsRawReader>(camera, std::move(decoder));
}

}  // namespace straymark::io
