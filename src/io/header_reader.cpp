#include "io/header_reader.h"

#include <algorithm>
#include <cmath>
#include <fmt/format.h>
#include <limits>
#include <optional>
#include <utility>

#include "core/error.h"
#include "io/header_time.h"
#include "sky/time.h"

namespace straymark::io {
namespace {

// Instants outside this range are no instants of an exposure: UTC began in 1960; 100,000 is 2132.
constexpr double kEarliestMjd = 36934.0;
constexpr double kLatestMjd = 100'000.0;
constexpr double kHourDeg = 15.0;

/// A card that was found, and where.
struct FoundCard {
    std::string keyword;
    std::string place;  ///< "HDU 0 (primary), keyword NAME"
    std::size_t header = 0;
    CardValue value;
};

/// The headers of one file, asked by keyword.
class Headers {
public:
    Headers(const std::string& file, const std::vector<PlacedHeader>& headers)
        : file_(file), headers_(headers) {}

    [[nodiscard]] std::optional<FoundCard> find(const std::string& keyword) const {
        for (std::size_t i = 0; i < headers_.size(); ++i) {
            std::optional<CardValue> value = headers_[i].header.find(keyword);
            if (!value || (value->quoted && value->text.empty())) {
                continue;
            }
            FoundCard card{keyword, headers_[i].place + ", keyword " + keyword, i,
                           *std::move(value)};
            if (!card.value.closed) {
                refuse(card, "a string that ends with a quote");
            }
            return card;
        }
        return std::nullopt;
    }
    [[nodiscard]] std::optional<FoundCard> find(const std::optional<std::string>& keyword) const {
        return keyword ? find(*keyword) : std::nullopt;
    }
    [[nodiscard]] FoundCard required(const std::string& keyword, const std::string& what) const {
        std::optional<FoundCard> card = find(keyword);
        if (!card) {
            throw InputError({file_, "keyword " + keyword, "no such card, or no value", what,
                              "check `headers` in the camera file against the file's header"});
        }
        return *std::move(card);
    }
    [[noreturn]] void refuse(const FoundCard& card, const std::string& expected,
                             const std::string& advice = {}) const {
        throw InputError({file_, card.place, quoted(card.value.text), expected,
                          advice.empty() ? "correct the header, or name another keyword in "
                                           "`headers` of the camera file"
                                         : advice});
    }
    [[nodiscard]] double number(const FoundCard& card, const std::string& expected) const {
        const std::optional<double> number = card.value.number();
        if (!number) {
            refuse(card, expected);
        }
        return *number;
    }
    /// The time scale that holds where this card stands (FITS 4.0, section 9.2.1).
    [[nodiscard]] TimeScale time_scale(const FoundCard& card) const;

private:
    const std::string& file_;
    const std::vector<PlacedHeader>& headers_;
};

TimeScale Headers::time_scale(const FoundCard& card) const {
    std::optional<CardValue> value = headers_[card.header].header.find("TIMESYS");
    std::size_t where = card.header;
    if (!value && !headers_.empty()) {
        where = 0;
        value = headers_[where].header.find("TIMESYS");
    }
    if (!value) {
        return TimeScale::utc;
    }
    // A realisation may follow in parentheses: "TT(TAI)".
    const std::string text = upper_case(value->text);
    const std::string_view name = trimmed(std::string_view(text).substr(0, text.find('(')));
    if (name == "UTC" || name == "UT" || name == "GMT") {
        return TimeScale::utc;
    }
    if (name == "TAI" || name == "IAT") {
        return TimeScale::tai;
    }
    if (name == "TT" || name == "TDT" || name == "ET") {
        return TimeScale::tt;
    }
    throw InputError({file_, headers_[where].place + ", keyword TIMESYS", quoted(value->text),
                      "UTC, TAI or TT", "times on other scales are not read; convert them"});
}

MjdUtc checked_instant(const Headers& headers, const FoundCard& card, std::optional<MjdUtc> time) {
    if (!time || time->days < kEarliestMjd || time->days > kLatestMjd) {
        const bool julian_date = time && time->days > kLatestMjd;
        headers.refuse(card, "an instant between 1960 and 2132, as MJD or YYYY-MM-DDThh:mm:ss",
                       julian_date ? "a Julian date is not a Modified Julian date: name a keyword "
                                     "that holds MJD"
                                   : "");
    }
    return *time;
}

/// An instant written in one card.
MjdUtc instant(const Headers& headers, const FoundCard& card, const std::string& for_date_alone) {
    const TimeScale scale = headers.time_scale(card);
    if (const std::optional<double> mjd = card.value.number()) {
        return checked_instant(
            headers, card,
            *mjd >= kEarliestMjd && *mjd <= kLatestMjd ? utc_from_mjd(*mjd, scale) : MjdUtc{*mjd});
    }
    const std::optional<DateText> date = parse_date(card.value.text);
    if (date && !date->time_of_day) {
        headers.refuse(card, "a date with a time of day", for_date_alone);
    }
    return checked_instant(headers, card, date ? utc_from_civil(date->time, scale) : std::nullopt);
}

MjdUtc start_of(const Headers& headers, const StartKeywords& keywords) {
    const FoundCard date_card =
        headers.required(keywords.date, "the instant at which the shutter opened");
    if (!keywords.time) {
        return instant(headers, date_card,
                       "a date without a time is not enough: give `start` as {date: KEYWORD, time: "
                       "KEYWORD} in `headers` of the camera file");
    }
    const std::optional<DateText> date = parse_date(date_card.value.text);
    if (!date) {
        headers.refuse(date_card, "a date YYYY-MM-DD");
    }
    const FoundCard time_card =
        headers.required(*keywords.time, "the time of day at which the shutter opened");
    CivilTime civil = date->time;
    if (!parse_time_of_day(time_card.value.text, civil)) {
        headers.refuse(time_card, "a time of day hh:mm:ss");
    }
    return checked_instant(headers, time_card,
                           utc_from_civil(civil, headers.time_scale(date_card)));
}

/// An instant of the optional kind: from its keyword, or `otherwise`, which is stated.
MjdUtc optional_instant(const Headers& headers, const std::optional<std::string>& keyword,
                        const char* name, MjdUtc otherwise, const char* how,
                        std::vector<std::string>& notes) {
    if (const std::optional<FoundCard> card = headers.find(keyword)) {
        return instant(headers, *card, "");
    }
    notes.push_back(keyword ? fmt::format("{}: {} (no {})", name, how, *keyword)
                            : fmt::format("{}: {}", name, how));
    return otherwise;
}

void read_times(const Camera& camera, const Headers& headers, ExposureHeader& out) {
    const HeaderKeywords& keys = camera.headers;
    out.start = start_of(headers, keys.start);
    const FoundCard exposure = headers.required(keys.exposure, "the exposure time in seconds");
    constexpr double kLongestExposureS = 1e6;
    out.exposure_s = headers.number(exposure, "the exposure time in seconds");
    if (out.exposure_s < 0.0 || out.exposure_s > kLongestExposureS) {
        headers.refuse(exposure, "seconds, from 0 to 1,000,000");
    }
    out.clear = optional_instant(headers, keys.clear, "clear", out.start, "start of the exposure",
                                 out.notes);
    out.end = optional_instant(headers, keys.end, "end",
                               {out.start.days + out.exposure_s / kSecondsPerDay},
                               "start + exposure", out.notes);
    out.readout_end =
        optional_instant(headers, keys.readout_end, "readout_end",
                         {out.end.days + camera.readout_s / kSecondsPerDay},
                         fmt::format("end + {} s", camera.readout_s).c_str(), out.notes);
}

void check_order(const Headers& headers, const HeaderKeywords& keys, const ExposureHeader& times) {
    // Clocks of shutter and controller differ a little; MJD is often written to 1e-8 day or 1e-5.
    constexpr double kClockSlackDays = 1.0 / kSecondsPerDay;
    const auto check = [&](const std::optional<std::string>& keyword, MjdUtc earlier, MjdUtc later,
                           const char* expected) {
        if (later.days < earlier.days - kClockSlackDays) {
            // Only a card can be out of order; a fallback cannot.
            headers.refuse(headers.required(keyword.value_or(keys.start.date), expected), expected);
        }
    };
    check(keys.clear, times.clear, times.start, "the last clear before the start");
    check(keys.end, times.start, times.end, "the end after the start");
    check(keys.readout_end, times.end, times.readout_end, "the end of read-out after the end");
}

ExposureType type_of(const Camera& camera, const Headers& headers, ExposureHeader& out) {
    const std::optional<FoundCard> card = headers.find(camera.headers.type);
    if (!card) {
        out.notes.push_back(camera.headers.type
                                ? fmt::format("type: sky (no {})", *camera.headers.type)
                                : "type: sky (the camera file names no keyword)");
        return ExposureType::sky;
    }
    out.type_value = trimmed(card->value.text);
    const std::string value = upper_case(out.type_value);
    for (const auto& [type, names] : camera.types) {
        if (std::any_of(names.begin(), names.end(),
                        [&](const std::string& name) { return upper_case(name) == value; })) {
            return type;
        }
    }
    out.notes.push_back(fmt::format("type: '{}' is not among `types` of the camera file",
                                    printable(out.type_value)));
    return ExposureType::other;
}

double angle(const Headers& headers, const FoundCard& card, double sexagesimal_unit_deg, double low,
             double high, const char* expected) {
    std::optional<double> degrees = card.value.number();
    if (!degrees) {
        if (const std::optional<double> value = parse_sexagesimal(card.value.text)) {
            degrees = *value * sexagesimal_unit_deg;
        }
    }
    if (!degrees || *degrees < low || *degrees > high) {
        headers.refuse(card, expected);
    }
    return *degrees;
}

SkyPoint boresight_of(const Headers& headers, const HeaderKeywords& keys) {
    const FoundCard ra = headers.required(keys.ra, "the right ascension of the pointing");
    const FoundCard dec = headers.required(keys.dec, "the declination of the pointing");
    const double ra_deg =
        angle(headers, ra, kHourDeg, 0.0, 360.0, "degrees from 0 to 360, or hours hh:mm:ss");
    const double dec_deg =
        angle(headers, dec, 1.0, -90.0, 90.0, "degrees from -90 to 90, or +-dd:mm:ss");
    return {ra_deg == 360.0 ? 0.0 : ra_deg, dec_deg};
}

std::string filter_of(const Camera& camera, const Headers& headers) {
    const FoundCard card = headers.required(camera.headers.filter, "the filter's name");
    std::string name(trimmed(card.value.text));
    if (camera.filters.count(name) == 0) {
        std::string known;
        for (const auto& [filter, properties] : camera.filters) {
            known += (known.empty() ? "" : ", ") + filter;
        }
        headers.refuse(card, "one of the camera's filters: " + known,
                       "add the filter to the camera file under the name that headers use");
    }
    return name;
}

double camera_angle_of(const Camera& camera, const Headers& headers) {
    const CameraAngle& angle_of_camera = camera.focal_plane.camera_angle;
    if (!angle_of_camera.keyword) {
        return angle_of_camera.zero_deg;
    }
    const FoundCard card =
        headers.required(*angle_of_camera.keyword, "the camera angle in degrees");
    return angle_of_camera.sign * headers.number(card, "the camera angle in degrees") +
           angle_of_camera.zero_deg;
}

/// Filter, pointing and camera angle: what an exposure of the sky cannot do without.
void read_pointing(const Camera& camera, const Headers& headers, ExposureHeader& out) {
    const auto read = [&](const char* name, const auto& body) {
        try {
            body();
        } catch (const InputError& error) {
            if (out.type == ExposureType::sky) {
                throw;
            }
            const InputFault& fault = error.fault();
            out.notes.push_back(
                fmt::format("{}: not known ({}: {})", name, fault.place, fault.found));
        }
    };
    const double nan = std::numeric_limits<double>::quiet_NaN();
    out.boresight = {nan, nan};
    out.psi_deg = camera.focal_plane.camera_angle.zero_deg;
    read("filter", [&] { out.filter = filter_of(camera, headers); });
    read("pointing", [&] { out.boresight = boresight_of(headers, camera.headers); });
    read("camera angle", [&] { out.psi_deg = camera_angle_of(camera, headers); });
}

void read_pier_side(const Camera& camera, const Headers& headers, ExposureHeader& out) {
    if (camera.telescope.mount != Mount::equatorial || !camera.telescope.pier_flipped) {
        return;
    }
    const std::optional<FoundCard> card = headers.find(camera.headers.pier_side);
    if (!card) {
        out.notes.push_back("pier side: not flipped (no such card)");
        return;
    }
    out.pier_flipped = upper_case(trimmed(card->value.text)) ==
                       upper_case(trimmed(*camera.telescope.pier_flipped));
}

std::string identity_of(const Headers& headers, const std::string& keyword) {
    const FoundCard card = headers.required(keyword, "the exposure's identifier");
    std::string id(trimmed(card.value.text));
    if (id.empty() || printable(id) != id) {
        headers.refuse(card, "an identifier of 1 to 80 printable characters");
    }
    return id;
}

}  // namespace

ExposureHeader read_exposure_header(const Camera& camera, const std::string& file,
                                    const std::vector<PlacedHeader>& placed) {
    const Headers headers(file, placed);
    const HeaderKeywords& keys = camera.headers;
    ExposureHeader out;
    out.id = identity_of(headers, keys.id);
    out.type = type_of(camera, headers, out);
    read_times(camera, headers, out);
    check_order(headers, keys, out);
    read_pointing(camera, headers, out);
    read_pier_side(camera, headers, out);
    if (const std::optional<FoundCard> card = headers.find(keys.sequence)) {
        out.sequence = trimmed(card->value.text);
    }
    if (const std::optional<FoundCard> card = headers.find(keys.mode)) {
        out.mode = trimmed(card->value.text);
    }
    if (const std::optional<FoundCard> card = headers.find(keys.temperature)) {
        out.temperature = card->value.number();
        if (!out.temperature) {
            out.notes.push_back(
                fmt::format("temperature: '{}' is not a number", printable(card->value.text)));
        }
    }
    return out;
}

}  // namespace straymark::io
