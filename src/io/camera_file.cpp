#include "io/camera_file.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <fmt/format.h>
#include <set>
#include <span>

#include "camera/geometry.h"
#include "core/error.h"
#include "io/camera_detectors.h"
#include "io/camera_tables.h"
#include "io/files.h"
#include "io/fits_cards.h"
#include "io/fits_section.h"
#include "io/yaml.h"

namespace straymark::io {
namespace {

constexpr NumberRange kAngle{-360.0, 360.0, "deg"};
constexpr NumberRange kAperture{10.0, 1e5, "mm"};
constexpr NumberRange kFocalLength{50.0, 1e6, "mm"};

Observatory read_observatory(const YamlValue& value) {
    const YamlMapping map = value.mapping({"latitude_deg", "longitude_deg", "height_m"});
    return {map.required("latitude_deg").number({-90.0, 90.0, "deg"}),
            map.required("longitude_deg").number({-180.0, 360.0, "deg"}),
            map.required("height_m").number({-500.0, 10000.0, "m"})};
}

Strut read_strut(const YamlValue& value, const Telescope& telescope) {
    const YamlMapping map = value.mapping({"angle_deg", "width_mm", "inner_mm", "outer_mm"});
    const double pupil_radius = 0.5 * telescope.aperture_mm;
    Strut strut;
    strut.angle_deg = map.required("angle_deg").number(kAngle);
    strut.width_mm = map.required("width_mm").number({0.0, pupil_radius, "mm", true});
    strut.inner_mm = map.required("inner_mm").number({0.0, pupil_radius, "mm"});
    strut.outer_mm = map.required("outer_mm").number({0.0, pupil_radius, "mm"});
    if (strut.inner_mm < 0.5 * telescope.obstruction_mm) {
        map.required("inner_mm")
            .refuse(fmt::format("at least {} mm, the radius of the obstruction",
                                0.5 * telescope.obstruction_mm),
                    "give the length seen in the clear aperture");
    }
    if (strut.outer_mm <= strut.inner_mm) {
        map.required("outer_mm").refuse(fmt::format("more than inner_mm, {}", strut.inner_mm));
    }
    return strut;
}

Telescope read_telescope(const YamlValue& value) {
    const YamlMapping map = value.mapping({"mount", "derotated", "pier_flipped", "aperture_mm",
                                           "obstruction_mm", "focal_length_mm", "struts"});
    Telescope telescope;
    telescope.mount = map.required("mount").choice<Mount>(
        {{"altaz", Mount::altaz}, {"equatorial", Mount::equatorial}});
    if (const auto derotated = map.optional("derotated")) {
        telescope.derotated = derotated->boolean();
    }
    if (const auto flipped = map.optional("pier_flipped")) {
        telescope.pier_flipped = flipped->text(68);
    }
    telescope.aperture_mm = map.required("aperture_mm").number(kAperture);
    telescope.obstruction_mm = map.required("obstruction_mm").number({0.0, kAperture.most, "mm"});
    if (telescope.obstruction_mm >= telescope.aperture_mm) {
        map.required("obstruction_mm")
            .refuse(fmt::format("less than aperture_mm, {}", telescope.aperture_mm));
    }
    telescope.focal_length_mm = map.required("focal_length_mm").number(kFocalLength);
    if (const auto struts = map.optional("struts")) {
        for (const YamlValue& strut : struts->items(0, 64)) {
            telescope.struts.push_back(read_strut(strut, telescope));
        }
    }
    return telescope;
}

/// +1 or -1.
int read_sign(const YamlValue& value) {
    const int sign = value.integer(-1, 1);
    if (sign == 0) {
        value.refuse("1 or -1");
    }
    return sign;
}

/// A header keyword as FITS 4.0 allows it, or one in the HIERARCH convention.
std::string read_keyword(const YamlValue& value) {
    constexpr std::size_t kLongest = 68;
    const std::string text = value.text(kLongest);
    const bool standard =
        text.size() <= 8 && std::all_of(text.begin(), text.end(), [](unsigned char c) {
            return (c >= '0' && c <= '9') || (c >= 'A' && c <= 'Z') || c == '_' || c == '-';
        });
    if (!standard && !text.starts_with("HIERARCH ")) {
        value.refuse("a FITS keyword: 1 to 8 of A-Z 0-9 _ -, or HIERARCH and what follows it");
    }
    return text;
}

FocalPlane read_focal_plane(const YamlValue& value) {
    const YamlMapping map = value.mapping({"pixel_um", "parity", "camera_angle_deg", "distortion"});
    FocalPlane plane;
    plane.pixel_um = map.required("pixel_um").number({0.5, 500.0, "um"});
    plane.parity = read_sign(map.required("parity"));
    const YamlMapping angle = map.required("camera_angle_deg").mapping({"keyword", "sign", "zero"});
    if (const auto keyword = angle.optional("keyword")) {
        plane.camera_angle.keyword = read_keyword(*keyword);
    }
    if (const auto sign = angle.optional("sign")) {
        plane.camera_angle.sign = read_sign(*sign);
    }
    if (const auto zero = angle.optional("zero")) {
        plane.camera_angle.zero_deg = zero->number(kAngle);
    }
    if (const auto distortion = map.optional("distortion")) {
        const std::vector<YamlValue> k = distortion->items(2, 2);
        plane.k1 = k[0].number({-1e6, 1e6});
        plane.k2 = k[1].number({-1e12, 1e12});
    }
    return plane;
}

std::map<std::string, Filter> read_filters(const YamlValue& value) {
    std::map<std::string, Filter> filters;
    for (const auto& [name, entry] : value.entries(1, 256)) {
        const YamlMapping map =
            entry.mapping({"wavelength_nm", "width_nm", "zero_point", "extinction"});
        Filter filter;
        filter.wavelength_nm = map.required("wavelength_nm").number({100.0, 30000.0, "nm"});
        filter.width_nm =
            map.required("width_nm").number({0.0, 2.0 * filter.wavelength_nm, "nm", true});
        filter.zero_point = map.required("zero_point").number({0.0, 40.0});
        filter.extinction = map.required("extinction").number({0.0, 5.0});
        filters.emplace(name, filter);
    }
    return filters;
}

std::map<ExposureType, std::vector<std::string>> read_types(const YamlValue& value) {
    const YamlMapping map = value.mapping({"sky", "dark", "flat", "focus"});
    static constexpr std::array<std::pair<std::string_view, ExposureType>, 4> kTypes{
        {{"sky", ExposureType::sky},
         {"dark", ExposureType::dark},
         {"flat", ExposureType::flat},
         {"focus", ExposureType::focus}}};
    std::map<ExposureType, std::vector<std::string>> types;
    std::set<std::string> seen;
    for (const auto& [key, type] : kTypes) {
        const auto list = map.optional(key);
        if (!list) {
            continue;
        }
        for (const YamlValue& item : list->items(1, 64)) {
            types[type].push_back(item.text(68));
            if (!seen.insert(upper_case(types[type].back())).second) {
                item.refuse("each value of the type keyword once (upper and lower case are one)");
            }
        }
    }
    if (!types.contains(ExposureType::sky)) {
        value.refuse("a key 'sky': the type of exposures that get a mask", "",
                     "no value that means a sky exposure");
    }
    return types;
}

StartKeywords read_start(const YamlValue& value) {
    if (!value.is_mapping()) {
        return {read_keyword(value), std::nullopt};
    }
    const YamlMapping map = value.mapping({"date", "time"});
    return {read_keyword(map.required("date")), read_keyword(map.required("time"))};
}

HeaderKeywords read_headers(const YamlValue& value) {
    const YamlMapping map =
        value.mapping({"id", "sequence", "type", "start", "end", "exposure", "clear", "readout_end",
                       "filter", "ra", "dec", "pier_side", "temperature", "mode"});
    const auto optional = [&map](std::string_view key) -> std::optional<std::string> {
        const auto keyword = map.optional(key);
        return keyword ? std::optional(read_keyword(*keyword)) : std::nullopt;
    };
    HeaderKeywords headers;
    headers.id = read_keyword(map.required("id"));
    headers.sequence = optional("sequence");
    headers.type = optional("type");
    headers.start = read_start(map.required("start"));
    headers.end = optional("end");
    headers.exposure = read_keyword(map.required("exposure"));
    headers.clear = optional("clear");
    headers.readout_end = optional("readout_end");
    headers.filter = read_keyword(map.required("filter"));
    headers.ra = read_keyword(map.required("ra"));
    headers.dec = read_keyword(map.required("dec"));
    headers.pier_side = optional("pier_side");
    headers.temperature = optional("temperature");
    headers.mode = optional("mode");
    return headers;
}

constexpr std::array<std::string_view, 4> kPlaceholders{"{detector}", "{amplifier}", "{suffix}",
                                                        "{number}"};

/// `text` without its placeholders; refuses one that is not known.
std::string without_placeholders(const YamlValue& value, const std::string& text) {
    std::string rest;
    for (std::size_t at = 0; at < text.size();) {
        if (text[at] == '}') {
            value.refuse("a '{' before each '}'");
        }
        if (text[at] != '{') {
            rest += text[at++];
            continue;
        }
        const std::size_t end = text.find('}', at);
        const std::string_view placeholder =
            std::string_view(text).substr(at, end == std::string::npos ? end : end + 1 - at);
        if (std::find(kPlaceholders.begin(), kPlaceholders.end(), placeholder) ==
            kPlaceholders.end()) {
            value.refuse(fmt::format("only the placeholders {}", fmt::join(kPlaceholders, ", ")));
        }
        at += placeholder.size();
    }
    return rest;
}

/// The name of a keyword that holds a section, or the section itself.
std::string read_section_source(const YamlValue& value) {
    const std::string text = value.text(68);
    if (text.front() == '[') {
        if (!parse_section(text)) {
            value.refuse("a section \"[x1:x2,y1:y2]\"");
        }
        return text;
    }
    const std::string rest = without_placeholders(value, text);
    const bool standard =
        rest.size() <= 8 && std::all_of(rest.begin(), rest.end(), [](unsigned char c) {
            return (c >= '0' && c <= '9') || (c >= 'A' && c <= 'Z') || c == '_' || c == '-';
        });
    if (!standard && !rest.starts_with("HIERARCH ")) {
        value.refuse(
            "a FITS keyword, with placeholders where needed, or a "
            "section \"[x1:x2,y1:y2]\"");
    }
    return text;
}

RawLayout read_raw(const YamlValue& value) {
    const YamlMapping map =
        value.mapping({"hdu", "data", "bias", "prescan", "detector_section", "order"});
    const auto section = [&map](std::string_view key) -> std::optional<std::string> {
        const auto source = map.optional(key);
        return source ? std::optional(read_section_source(*source)) : std::nullopt;
    };
    RawLayout raw;
    const YamlValue hdu = map.required("hdu");
    raw.hdu = hdu.text(68);
    without_placeholders(hdu, raw.hdu);
    raw.data = section("data");
    raw.bias = section("bias");
    raw.prescan = section("prescan");
    raw.detector_section = section("detector_section");
    if (const auto order = map.optional("order")) {
        raw.order = order->choice<PixelOrder>(
            {{"readout", PixelOrder::readout}, {"detector", PixelOrder::detector}});
    }
    if (raw.order == PixelOrder::unstated && !raw.detector_section) {
        value.refuse("`order` or `detector_section`",
                     "say `order: readout` where the first pixel read comes first, `order: "
                     "detector` where pixels lie as on the detector",
                     "nothing that says in which order the pixels stand");
    }
    return raw;
}

/// Amplifiers told apart by suffixes must have different ones.
void require_suffixes(const YamlMapping& top, const Camera& camera) {
    const RawLayout& raw = camera.raw;
    bool used = false;
    for (const auto& source : {raw.data, raw.bias, raw.prescan, raw.detector_section}) {
        used = used || (source && source->find("{suffix}") != std::string::npos);
    }
    if (!used) {
        return;
    }
    for (const Detector& detector : camera.detectors) {
        std::set<std::string> suffixes;
        for (const Amplifier& amplifier : detector.amplifiers) {
            if (!suffixes.insert(amplifier.suffix).second) {
                top.required("layouts").refuse(
                    "a `suffix` of its own for each amplifier, since `raw` uses {suffix}", "",
                    fmt::format("amplifier {}/{} with suffix '{}'", detector.id, amplifier.id,
                                amplifier.suffix));
            }
        }
    }
}

void require_consistent_headers(const YamlMapping& top, const Camera& camera) {
    if (!camera.types.empty() && !camera.headers.type) {
        top.required("types").refuse("a key headers.type beside it",
                                     "name the keyword that holds these values");
    }
    if (camera.types.empty() && camera.headers.type) {
        top.required("headers").refuse("a key 'types' beside headers.type",
                                       "add e.g. `types: {sky: [OBJECT], dark: [DARK]}`");
    }
    if (camera.telescope.mount == Mount::equatorial && camera.telescope.pier_flipped &&
        !camera.headers.pier_side) {
        top.required("headers").refuse(
            "a key headers.pier_side, since telescope.pier_flipped is set");
    }
}

double radius_mm(FocalPoint point) {
    return std::hypot(point.x_mm, point.y_mm);
}

/// Detectors lie apart, inside the field that gnomonic projection and distortion can serve.
void require_focal_plane(const YamlMapping& top, const Camera& camera) {
    const double reach = distortion_reach_mm(camera.telescope, camera.focal_plane);
    for (const Detector& detector : camera.detectors) {
        double farthest = 0.0;
        for (const double x : {-0.5, detector.width - 0.5}) {
            for (const double y : {-0.5, detector.height - 0.5}) {
                farthest = std::max(
                    farthest, radius_mm(focal_from_detector(camera.focal_plane, detector, {x, y})));
            }
        }
        if (farthest > camera.telescope.focal_length_mm) {
            top.required("detectors")
                .refuse("a field within 45 degrees of the axis", "check centre_mm and pixel_um",
                        fmt::format("detector {} at {:.6g} mm from the axis with a focal length of "
                                    "{:.6g} mm",
                                    detector.id, farthest, camera.telescope.focal_length_mm));
        }
        if (farthest >= reach) {
            top.required("focal_plane")
                .refuse("a distortion that grows with the radius over all detectors",
                        "t in r = F t (1 + k1 t^2 + k2 t^4) is in radians",
                        fmt::format("a distortion that turns back at {:.6g} mm, inside detector {}",
                                    reach, detector.id));
        }
    }
}

void require_detectors_apart(const YamlMapping& top, const Camera& camera) {
    const double pixel_mm = 1e-3 * camera.focal_plane.pixel_um;
    for (std::size_t i = 0; i < camera.detectors.size(); ++i) {
        const Detector& a = camera.detectors[i];
        for (std::size_t j = 0; j < i; ++j) {
            const Detector& b = camera.detectors[j];
            const double apart =
                std::hypot(a.centre.x_mm - b.centre.x_mm, a.centre.y_mm - b.centre.y_mm);
            const int side = std::min({a.width, a.height, b.width, b.height});
            if (apart < 0.5 * side * pixel_mm) {
                top.required("detectors")
                    .refuse("detectors side by side", "is centre_mm in millimetres?",
                            fmt::format("detectors {} and {} with centres {:.6g} mm apart", b.id,
                                        a.id, apart));
            }
        }
    }
}

void require_named_hdus(const YamlMapping& top, const Camera& camera) {
    const std::string& hdu = camera.raw.hdu;
    const bool tells_detectors =
        hdu.find("{detector}") != std::string::npos || hdu.find("{number}") != std::string::npos;
    if (camera.detectors.size() > 1 && !tells_detectors) {
        top.required("raw").refuse(
            "{detector} or {number} in raw.hdu, for there are several detectors", "",
            fmt::format("hdu: \"{}\"", hdu));
    }
}

Camera read_camera(const YamlMapping& top) {
    Camera camera;
    camera.name = read_identifier(top.required("name"));
    camera.observatory = read_observatory(top.required("observatory"));
    camera.telescope = read_telescope(top.required("telescope"));
    camera.focal_plane = read_focal_plane(top.required("focal_plane"));
    camera.filters = read_filters(top.required("filters"));
    camera.detectors = read_detectors(top.required("layouts"), top.required("detectors"));
    camera.readout_s = top.required("readout_s").number({0.0, 3600.0, "s"});
    if (const auto types = top.optional("types")) {
        camera.types = read_types(*types);
    }
    camera.headers = read_headers(top.required("headers"));
    camera.raw = read_raw(top.required("raw"));
    require_consistent_headers(top, camera);
    require_suffixes(top, camera);
    require_named_hdus(top, camera);
    require_focal_plane(top, camera);
    require_detectors_apart(top, camera);
    return camera;
}

}  // namespace

Camera load_camera(const std::string& path) {
    const YamlFile file(path);
    file.require_format("straymark-camera", 1);
    const YamlMapping top = file.root().mapping(
        {"format", "name", "observatory", "telescope", "focal_plane", "filters", "layouts",
         "detectors", "amplifier_table", "readout_s", "types", "pair_table", "headers", "raw"});
    Camera camera = read_camera(top);
    camera.path = path;

    std::string digests = file.digest();
    const auto table_path = [&](const YamlValue& name) {
        const std::string table = resolved_beside(path, name.text(4096));
        digests += fmt::format(" {}", file_digest(InputFile(table)));
        return table;
    };
    read_amplifier_table(table_path(top.required("amplifier_table")), camera);
    if (const auto pairs = top.optional("pair_table")) {
        read_pair_table(table_path(*pairs), camera);
    }
    camera.digest = bytes_digest(std::as_bytes(std::span(digests)));
    return camera;
}

}  // namespace straymark::io
