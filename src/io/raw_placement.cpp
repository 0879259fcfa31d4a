#include "io/raw_placement.h"

#include <algorithm>
#include <fmt/format.h>
#include <fmt/ranges.h>
#include <iterator>
#include <map>
#include <utility>

#include "core/error.h"
#include "io/fits_section.h"

namespace straymark::io {
namespace {

constexpr std::string_view kPrimary = "primary";

void replace_all(std::string& text, std::string_view from, const std::string& to) {
    for (std::size_t at = text.find(from); at != std::string::npos;
         at = text.find(from, at + to.size())) {
        text.replace(at, from.size(), to);
    }
}

/// {number}: counts amplifiers from 1, within the detector where the pattern names that, else over
/// the camera.
int number_of(const Camera& camera, AmplifierRef ref, bool within_detector) {
    int number = ref.amplifier + 1;
    for (int d = 0; d < ref.detector && !within_detector; ++d) {
        number += static_cast<int>(camera.detectors[static_cast<std::size_t>(d)].amplifiers.size());
    }
    return number;
}

std::string filled_in(std::string pattern, const Camera& camera, AmplifierRef ref) {
    const bool within_detector = pattern.find("{detector}") != std::string::npos;
    const Amplifier& amplifier = camera.amplifier(ref);
    replace_all(pattern, "{number}", std::to_string(number_of(camera, ref, within_detector)));
    replace_all(pattern, "{suffix}", amplifier.suffix);
    replace_all(pattern, "{amplifier}", amplifier.id);
    replace_all(pattern, "{detector}", camera.detectors[static_cast<std::size_t>(ref.detector)].id);
    return pattern;
}

/// Does this entry tell amplifiers of one detector apart?
bool tells_amplifiers_apart(const std::optional<std::string>& entry) {
    return entry && (entry->find("{amplifier}") != std::string::npos ||
                     entry->find("{suffix}") != std::string::npos ||
                     entry->find("{number}") != std::string::npos);
}

std::optional<int> primary_image(const FitsStructure& structure) {
    for (const FitsHdu& hdu : structure.hdus) {
        if ((hdu.number == 0 || hdu.was_primary) && hdu.has_pixels()) {
            return hdu.number;
        }
    }
    return std::nullopt;
}

/// Places the amplifiers of one detector, one after the other.
class Placer {
public:
    Placer(const Camera& camera, int detector, const InputFile& file,
           const FitsStructure& structure)
        : camera_(camera),
          layout_(camera.raw),
          detector_(camera.detectors[static_cast<std::size_t>(detector)]),
          detector_index_(detector),
          file_(file),
          structure_(structure),
          shared_(detector_.amplifiers.size() > 1 && !tells_amplifiers_apart(layout_.hdu)) {}

    [[nodiscard]] DetectorPlacement placed();

private:
    /// A section and what to call it in a message.
    struct NamedSection {
        FitsSection section;
        std::string place;
    };
    /// The image of one amplifier.
    struct Source {
        AmplifierRef ref;
        const Amplifier& amplifier;
        const FitsHdu& hdu;
        std::string place;
        PixelBox image;  ///< all its pixels
    };
    /// How pixels of the data section map to the detector.
    struct Target {
        PixelBox file;            ///< data section
        PixelBox detector;        ///< the detector's pixels it holds
        bool whole = false;       ///< that of all amplifiers together, not of one
        bool by_section = false;  ///< a detector section says where and which way round
        bool flip_x = false, flip_y = false;
    };

    [[nodiscard]] std::optional<int> hdu_of(AmplifierRef ref) const;
    [[nodiscard]] Source source_of(AmplifierRef ref, int hdu) const;
    const FitsHeader& header_of(int hdu);
    [[nodiscard]] std::optional<NamedSection> section(const Source& source,
                                                      const std::optional<std::string>& entry);
    NamedSection required_section(const Source& source, const std::string& entry);
    [[nodiscard]] PixelBox strip(const Source& source, const NamedSection& found,
                                 const PixelBox& data) const;
    std::optional<AmplifierPlacement> place(const Source& source, DetectorPlacement& result);
    Target target_of(const Source& source, DetectorPlacement& result);
    void check_size(const Source& source, const std::string& place, const PixelBox& found,
                    int width, int height, const std::string& of_what) const;
    void orient_as_read(const Source& source, AmplifierPlacement& out) const;
    bool orient_by_target(const Source& source, const Target& target,
                          AmplifierPlacement& out) const;
    void check_prescan(const Source& source, const AmplifierPlacement& placement) const;

    [[noreturn]] void refuse(const std::string& place, const std::string& found,
                             const std::string& expected, const std::string& advice) const {
        throw InputError({file_.path(), place, found, expected, advice});
    }
    [[nodiscard]] std::string amplifier_name(const Source& source) const {
        return detector_.id + "/" + source.amplifier.id;
    }

    const Camera& camera_;
    const RawLayout& layout_;
    const Detector& detector_;
    int detector_index_;
    const InputFile& file_;
    const FitsStructure& structure_;
    bool shared_;                        ///< one image for all amplifiers of the detector
    std::map<int, FitsHeader> headers_;  ///< read once each
};

std::optional<int> Placer::hdu_of(AmplifierRef ref) const {
    if (upper_case(layout_.hdu) == upper_case(kPrimary)) {
        const std::optional<int> image = primary_image(structure_);
        if (image && camera_.detectors.size() > 1) {
            refuse(place_of(structure_.hdus[static_cast<std::size_t>(*image)]),
                   "`hdu: primary` for a camera of several detectors",
                   "a pattern that names the detector",
                   "let `raw: {hdu: ...}` of the camera file hold {detector}");
        }
        return image;
    }
    const std::string name = hdu_name(camera_, ref);
    const auto [first, last] = structure_.images_by_name.equal_range(upper_case(trimmed(name)));
    if (first == last) {
        return std::nullopt;
    }
    if (std::next(first) != last) {
        refuse(fmt::format("HDU {} and HDU {}", first->second, std::next(first)->second),
               fmt::format("the name {} twice", name), "one HDU of each name",
               "which of the two holds the pixels cannot be known");
    }
    const bool holds_pixels = structure_.hdus[static_cast<std::size_t>(first->second)].has_pixels();
    return holds_pixels ? std::optional(first->second) : std::nullopt;
}

const FitsHeader& Placer::header_of(int hdu) {
    const auto [found, is_new] = headers_.try_emplace(hdu);
    if (is_new) {
        found->second = read_header(file_, structure_.hdus[static_cast<std::size_t>(hdu)]);
    }
    return found->second;
}

Placer::Source Placer::source_of(AmplifierRef ref, int number) const {
    const FitsHdu& hdu = structure_.hdus[static_cast<std::size_t>(number)];
    const std::string place = place_of(hdu);
    // Nothing that a camera adds to its pixels (prescan, overscan) exceeds them by so much.
    constexpr std::int64_t kMostExtra = 4096;
    const std::int64_t most =
        2 * std::int64_t{std::max(detector_.width, detector_.height)} + kMostExtra;
    if (hdu.axes.size() != 2 || hdu.axes[0] > most || hdu.axes[1] > most) {
        refuse(place, fmt::format("an array of {} pixels", fmt::join(hdu.axes, " x ")),
               fmt::format("an image with at most {} pixels on each of two axes", most),
               "this is not an image of this camera");
    }
    return {ref, camera_.amplifier(ref), hdu, place,
            PixelBox{0, 0, static_cast<int>(hdu.axes[0]), static_cast<int>(hdu.axes[1])}};
}

std::optional<Placer::NamedSection> Placer::section(const Source& source,
                                                    const std::optional<std::string>& entry) {
    if (!entry) {
        return std::nullopt;
    }
    if (entry->starts_with('[')) {
        const std::optional<FitsSection> literal = parse_section(*entry);
        if (!literal) {
            refuse("`raw` of the camera file", quoted(*entry), "a section [x1:x2,y1:y2]",
                   "correct the camera file");
        }
        return NamedSection{*literal, source.place + ", section of the camera file"};
    }
    const std::string keyword = filled_in(*entry, camera_, source.ref);
    std::optional<CardValue> value = header_of(source.hdu.number).find(keyword);
    if (!value) {
        value = header_of(0).find(keyword);
    }
    if (!value) {
        return std::nullopt;
    }
    const std::string place = source.place + ", keyword " + keyword;
    const std::optional<FitsSection> found =
        value->closed ? parse_section(value->text) : std::nullopt;
    if (!found) {
        refuse(place, quoted(value->text), "a section [x1:x2,y1:y2]",
               "correct the header, or give the section in `raw` of the camera file");
    }
    return NamedSection{*found, place};
}

Placer::NamedSection Placer::required_section(const Source& source, const std::string& entry) {
    std::optional<NamedSection> found = section(source, entry);
    if (!found) {
        refuse(source.place + ", keyword " + filled_in(entry, camera_, source.ref), "no such card",
               "a section [x1:x2,y1:y2]",
               "correct `raw` of the camera file if headers do not carry this keyword");
    }
    return *std::move(found);
}

void Placer::check_size(const Source& source, const std::string& place, const PixelBox& found,
                        int width, int height, const std::string& of_what) const {
    if (found.width() == width && found.height() == height) {
        return;
    }
    const bool binned = width % found.width() == 0 && height % found.height() == 0 &&
                        width / found.width() <= 16 && height / found.height() <= 16;
    refuse(place, fmt::format("{} x {} pixels", found.width(), found.height()),
           fmt::format("{} x {}, the size of {} of {}", width, height, of_what,
                       amplifier_name(source)),
           binned ? fmt::format("the frame seems to be binned {} x {}; binned frames are not read",
                                width / found.width(), height / found.height())
                  : "check the camera file's sections against the header");
}

/// Which part of the detector the data section holds, and which way round.
Placer::Target Placer::target_of(const Source& source, DetectorPlacement& result) {
    const std::optional<NamedSection> data =
        layout_.data ? std::optional(required_section(source, *layout_.data)) : std::nullopt;
    Target target;
    target.file = data ? data->section.box() : source.image;
    const std::string place = data ? data->place : source.place;
    if (target.file != target.file.intersected(source.image)) {
        refuse(place, to_string(data->section),
               fmt::format("a section of an image of {} x {} pixels", source.image.width(),
                           source.image.height()),
               "the image is not the one that its header describes");
    }
    target.whole = shared_ && !tells_amplifiers_apart(layout_.data);
    target.detector = target.whole ? PixelBox{0, 0, detector_.width, detector_.height}
                                   : source.amplifier.readout.section();
    const std::string of_what = target.whole ? "the detector" : "the section";
    target.flip_x = data && data->section.reversed_x();
    target.flip_y = data && data->section.reversed_y();
    const std::optional<NamedSection> on_detector = section(source, layout_.detector_section);
    if (!on_detector) {
        const bool as_read = !target.whole && layout_.order == PixelOrder::readout &&
                             detector_.serial == SerialAxis::y;
        check_size(source, place, target.file,
                   as_read ? target.detector.height() : target.detector.width(),
                   as_read ? target.detector.width() : target.detector.height(), of_what);
        return target;
    }
    const PixelBox box = on_detector->section.box();
    if (box != box.intersected(target.detector)) {
        refuse(on_detector->place, to_string(on_detector->section),
               fmt::format("{} of {}, {}", of_what, amplifier_name(source),
                           section_text(target.detector)),
               "HDUs are swapped, or the camera file is another camera's");
    }
    check_size(source, place, target.file, box.width(), box.height(), of_what);
    if (box != target.detector) {
        result.notes.push_back(fmt::format("{}: a window, {} of {}", on_detector->place,
                                           section_text(box), section_text(target.detector)));
    }
    target.detector = box;
    target.by_section = true;
    target.flip_x ^= on_detector->section.reversed_x();
    target.flip_y ^= on_detector->section.reversed_y();
    return target;
}

/// The data section lies in the file as it was read: first pixel first, rows along its first axis.
void Placer::orient_as_read(const Source& source, AmplifierPlacement& out) const {
    const ReadoutGeometry& readout = source.amplifier.readout;
    out.origin = {readout.first_tick(), readout.first_row()};
}

/// The data section maps to a part of the detector; false where nothing of the amplifier is in it.
bool Placer::orient_by_target(const Source& source, const Target& target,
                              AmplifierPlacement& out) const {
    const ReadoutGeometry& readout = source.amplifier.readout;
    const PixelBox held = target.detector.intersected(readout.section());
    if (held.empty()) {
        return false;
    }
    // Offsets of `held` from the edge of the target at which the file's first pixel lies.
    const int from_left =
        target.flip_x ? target.detector.x1 - held.x1 : held.x0 - target.detector.x0;
    const int from_below =
        target.flip_y ? target.detector.y1 - held.y1 : held.y0 - target.detector.y0;
    const int x0 = target.file.x0 + from_left;
    const int y0 = target.file.y0 + from_below;
    out.data = {x0, y0, x0 + held.width(), y0 + held.height()};
    const int step_x = target.flip_x ? -1 : 1;
    const int step_y = target.flip_y ? -1 : 1;
    const DetectorPixel first{target.flip_x ? held.x1 - 1 : held.x0,
                              target.flip_y ? held.y1 - 1 : held.y0};
    out.origin = readout.readout_from_detector(first);
    const ReadoutIndex along_x = readout.readout_from_detector({first.x + step_x, first.y});
    const ReadoutIndex along_y = readout.readout_from_detector({first.x, first.y + step_y});
    out.tick_per_column = along_x.tick - out.origin.tick;
    out.row_per_column = along_x.row - out.origin.row;
    out.tick_per_row = along_y.tick - out.origin.tick;
    out.row_per_row = along_y.row - out.origin.row;
    return true;
}

PixelBox Placer::strip(const Source& source, const NamedSection& found,
                       const PixelBox& data) const {
    const PixelBox box = found.section.box();
    if (box != box.intersected(source.image) || !box.intersected(data).empty()) {
        refuse(found.place, to_string(found.section),
               fmt::format("pixels of the image, {}, outside the data section {}",
                           section_text(source.image), section_text(data)),
               "correct the header, or `raw` of the camera file");
    }
    return box;
}

/// What the header says of the prescan must be what the camera file says: so many ticks, before the
/// first data pixel of each row.
void Placer::check_prescan(const Source& source, const AmplifierPlacement& placement) const {
    const int expected = source.amplifier.readout.first_tick();
    const std::string place =
        source.place + ", prescan " + filled_in(*layout_.prescan, camera_, source.ref);
    const bool along_x = placement.tick_per_column != 0;
    int found = 0;
    if (placement.prescan) {
        found = along_x ? placement.prescan->width() : placement.prescan->height();
    }
    if (found != expected) {
        refuse(place,
               placement.prescan ? fmt::format("{} pixels of prescan", found) : "no such section",
               fmt::format("{}, the prescan of {} in the camera file", expected,
                           amplifier_name(source)),
               "correct `prescan` of the layout in the camera file");
    }
    if (!placement.prescan) {
        return;
    }
    const PixelBox& strip = *placement.prescan;
    const PixelBox& data = placement.data;
    const bool forward = (along_x ? placement.tick_per_column : placement.tick_per_row) > 0;
    const bool below = along_x ? strip.x1 <= data.x0 : strip.y1 <= data.y0;
    const bool above = along_x ? strip.x0 >= data.x1 : strip.y0 >= data.y1;
    if (!(forward ? below : above)) {
        refuse(place, section_text(strip),
               fmt::format("pixels on the side of {} that is read first", section_text(data)),
               "the amplifier's corner in the camera file does not agree with this header");
    }
}

std::optional<AmplifierPlacement> Placer::place(const Source& source, DetectorPlacement& result) {
    const Target target = target_of(source, result);
    AmplifierPlacement out;
    out.hdu = source.hdu.number;
    out.shared = shared_;
    if (!target.by_section && layout_.order == PixelOrder::readout && !target.whole) {
        if (target.flip_x || target.flip_y) {
            refuse(source.place, "a reversed data section and `order: readout`",
                   "one statement of the pixel order",
                   "state `order: detector` or `detector_section` in the camera file");
        }
        out.data = target.file;
        orient_as_read(source, out);
    } else if (target.by_section || layout_.order == PixelOrder::detector) {
        if (!orient_by_target(source, target, out)) {
            return std::nullopt;
        }
    } else {
        const bool stated = layout_.order == PixelOrder::readout;
        refuse(source.place,
               stated ? "one image of several amplifiers and `order: readout`"
                      : "no detector section and no `order`",
               "a statement of the pixel order",
               stated ? "such an image is in detector order: state `order: detector`"
                      : "state `order: readout` or `order: detector` in `raw` of the camera file");
    }
    if (layout_.bias) {
        out.bias = strip(source, required_section(source, *layout_.bias), target.file);
    }
    if (const std::optional<NamedSection> prescan = section(source, layout_.prescan)) {
        out.prescan = strip(source, *prescan, target.file);
    }
    if (layout_.prescan) {
        check_prescan(source, out);
    }
    return out;
}

DetectorPlacement Placer::placed() {
    DetectorPlacement result;
    const int count = static_cast<int>(detector_.amplifiers.size());
    for (int i = 0; i < count; ++i) {
        const AmplifierRef ref{detector_index_, i};
        const std::optional<int> hdu = hdu_of(ref);
        std::string reason;
        std::optional<AmplifierPlacement> placement;
        if (!hdu) {
            reason = fmt::format("no HDU named {} with pixels", hdu_name(camera_, ref));
        } else {
            placement = place(source_of(ref, *hdu), result);
            reason = placement ? "" : "outside the window that was read";
        }
        result.amplifiers.push_back(placement);
        result.missing.push_back(reason);
    }
    return result;
}

}  // namespace

bool DetectorPlacement::present() const {
    return std::any_of(amplifiers.begin(), amplifiers.end(),
                       [](const auto& amplifier) { return amplifier.has_value(); });
}

std::string hdu_name(const Camera& camera, AmplifierRef amplifier) {
    return filled_in(camera.raw.hdu, camera, amplifier);
}

DetectorPlacement placed_detector(const Camera& camera, int detector, const InputFile& file,
                                  const FitsStructure& structure) {
    return Placer(camera, detector, file, structure).placed();
}

std::vector<bool> claimed_hdus(const Camera& camera, const FitsStructure& structure) {
    std::vector<bool> claimed(structure.hdus.size(), false);
    if (upper_case(camera.raw.hdu) == upper_case(kPrimary)) {
        if (const std::optional<int> image = primary_image(structure)) {
            claimed[static_cast<std::size_t>(*image)] = true;
        }
        return claimed;
    }
    for (std::size_t d = 0; d < camera.detectors.size(); ++d) {
        for (std::size_t a = 0; a < camera.detectors[d].amplifiers.size(); ++a) {
            const AmplifierRef ref{static_cast<int>(d), static_cast<int>(a)};
            const std::string name = hdu_name(camera, ref);
            const auto [first, last] =
                structure.images_by_name.equal_range(upper_case(trimmed(name)));
            for (auto hdu = first; hdu != last; ++hdu) {
                claimed[static_cast<std::size_t>(hdu->second)] = true;
            }
        }
    }
    return claimed;
}

}  // namespace straymark::io
