#include "io/header_time.h"

#include <array>
#include <charconv>
#include <string>

#include "io/fits_cards.h"

namespace straymark::io {
namespace {

/// Takes exactly `digits` digits from the front of `text`.
bool take_digits(std::string_view& text, std::size_t digits, int& value) {
    if (text.size() < digits ||
        text.substr(0, digits).find_first_not_of("0123456789") != std::string_view::npos) {
        return false;
    }
    std::from_chars(text.data(), text.data() + digits, value);
    text.remove_prefix(digits);
    return true;
}

bool take_one_of(std::string_view& text, std::string_view allowed) {
    if (text.empty() || allowed.find(text.front()) == std::string_view::npos) {
        return false;
    }
    text.remove_prefix(1);
    return true;
}

/// All of `text` as a plain decimal number without a sign.
std::optional<double> unsigned_decimal(std::string_view text) {
    if (text.empty() || text.find_first_not_of("0123456789.") != std::string_view::npos) {
        return std::nullopt;
    }
    return CardValue{std::string(text), false, true}.number();
}

}  // namespace

bool parse_time_of_day(std::string_view text, CivilTime& time) {
    text = trimmed(text);
    if (!take_digits(text, 2, time.hour) || !take_one_of(text, ":") ||
        !take_digits(text, 2, time.minute) || !take_one_of(text, ":")) {
        return false;
    }
    const std::optional<double> second = unsigned_decimal(text);
    time.second = second.value_or(0.0);
    return second.has_value();
}

std::optional<DateText> parse_date(std::string_view text) {
    DateText date;
    text = trimmed(text);
    if (!take_digits(text, 4, date.time.year) || !take_one_of(text, "-") ||
        !take_digits(text, 2, date.time.month) || !take_one_of(text, "-") ||
        !take_digits(text, 2, date.time.day)) {
        return std::nullopt;
    }
    if (text.empty()) {
        return date;
    }
    if (text.ends_with('Z')) {
        text.remove_suffix(1);
    }
    date.time_of_day = take_one_of(text, "T ") && parse_time_of_day(text, date.time);
    return date.time_of_day ? std::optional(date) : std::nullopt;
}

std::optional<double> parse_sexagesimal(std::string_view text) {
    text = trimmed(text);
    const bool negative = text.starts_with('-');
    take_one_of(text, "+-");
    std::array<double, 3> parts{};
    std::size_t count = 0;
    while (!text.empty()) {
        const std::size_t end = text.find_first_not_of("0123456789.");
        const std::optional<double> part = unsigned_decimal(text.substr(0, end));
        if (!part || count == parts.size()) {
            return std::nullopt;
        }
        parts[count++] = *part;
        text = end == std::string_view::npos ? std::string_view() : text.substr(end);
        const bool separated = take_one_of(text, ": hHdDmMsS");
        text = trimmed(text);
        if (!separated && !text.empty()) {
            return std::nullopt;
        }
    }
    // Seconds are rounded to 60.0 by some writers.
    if (count < 2 || parts[1] >= 60.0 || parts[2] > 60.0) {
        return std::nullopt;
    }
    const double size = parts[0] + parts[1] / 60.0 + parts[2] / 3600.0;
    return negative ? -size : size;
}

}  // namespace straymark::io
