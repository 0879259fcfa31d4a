#include "io/fits_cards.h"

#include <algorithm>
#include <cassert>
#include <charconv>
#include <cmath>
#include <fmt/format.h>
#include <utility>

namespace straymark::io {
namespace {

constexpr std::size_t kKeywordBytes = 8;
constexpr std::string_view kHierarch = "HIERARCH";

/// A string value from its opening quote on: two quotes in a row stand for one.
CardValue quoted_value(std::string_view field) {
    CardValue value;
    value.quoted = true;
    value.closed = false;
    for (std::size_t i = 1; i < field.size(); ++i) {
        if (field[i] != '\'') {
            value.text += field[i];
        } else if (i + 1 < field.size() && field[i + 1] == '\'') {
            value.text += field[i++];
        } else {
            value.closed = true;
            break;
        }
    }
    const std::size_t last = value.text.find_last_not_of(' ');
    value.text.resize(last == std::string::npos ? 0 : last + 1);
    return value;
}

std::optional<CardValue> field_value(std::string_view field) {
    const std::size_t first = field.find_first_not_of(' ');
    if (first == std::string_view::npos) {
        return std::nullopt;
    }
    field.remove_prefix(first);
    if (field.front() == '\'') {
        return quoted_value(field);
    }
    const std::string_view text = trimmed(field.substr(0, field.find('/')));
    if (text.empty()) {
        return std::nullopt;
    }
    return CardValue{std::string(text), false, true};
}

bool is_hierarch(std::string_view card) {
    return card.substr(0, kKeywordBytes) == kHierarch;
}

/// Where the value field of a card begins; npos: it has none.
std::size_t value_begin(std::string_view card) {
    if (is_hierarch(card)) {
        const std::size_t equals = card.find('=');
        return equals == std::string_view::npos ? equals : equals + 1;
    }
    return card.size() > kKeywordBytes && card[kKeywordBytes] == '=' ? kKeywordBytes + 1
                                                                     : std::string_view::npos;
}

std::string_view keyword_of(std::string_view card) {
    if (is_hierarch(card)) {
        return trimmed(card.substr(kKeywordBytes, card.find('=') - kKeywordBytes));
    }
    return trimmed(card.substr(0, kKeywordBytes));
}

bool same_letters(std::string_view a, std::string_view b) {
    return a.size() == b.size() && upper_case(a) == upper_case(b);
}

}  // namespace

std::string upper_case(std::string_view text) {
    std::string upper(text);
    std::transform(upper.begin(), upper.end(), upper.begin(), [](char c) {
        return c >= 'a' && c <= 'z' ? static_cast<char>(c - 'a' + 'A') : c;
    });
    return upper;
}

std::string_view trimmed(std::string_view text) {
    const std::size_t first = text.find_first_not_of(' ');
    if (first == std::string_view::npos) {
        return {};
    }
    return text.substr(first, text.find_last_not_of(' ') - first + 1);
}

std::string printable(std::string_view text) {
    constexpr std::size_t kMost = 80;
    std::string shown(text.substr(0, kMost));
    std::replace_if(
        shown.begin(), shown.end(), [](char c) { return c < ' ' || c > '~'; }, '?');
    if (text.size() > kMost) {
        shown += "...";
    }
    return shown;
}

std::string quoted(std::string_view text) {
    return fmt::format("'{}'", printable(text));
}

std::optional<std::int64_t> CardValue::integer() const {
    std::string_view digits = trimmed(text);
    if (digits.starts_with('+')) {
        digits.remove_prefix(1);
    }
    std::int64_t value = 0;
    const auto [end, error] = std::from_chars(digits.data(), digits.data() + digits.size(), value);
    if (error != std::errc() || end != digits.data() + digits.size()) {
        return std::nullopt;
    }
    return value;
}

std::optional<double> CardValue::number() const {
    std::string digits(trimmed(text));
    std::replace_if(
        digits.begin(), digits.end(), [](char c) { return c == 'D' || c == 'd'; }, 'E');
    const char* first = digits.data();
    const char* last = digits.data() + digits.size();
    if (first != last && *first == '+') {
        ++first;
    }
    double value = 0.0;
    const auto [end, error] = std::from_chars(first, last, value);
    if (error != std::errc() || end != last || !std::isfinite(value)) {
        return std::nullopt;
    }
    return value;
}

std::optional<bool> CardValue::logical() const {
    if (text == "T" || text == "F") {
        return text == "T";
    }
    return std::nullopt;
}

std::optional<CardValue> card_value(std::string_view card) {
    const std::size_t begin = value_begin(card);
    return begin == std::string_view::npos ? std::nullopt : field_value(card.substr(begin));
}

FitsHeader::FitsHeader(std::string cards) : cards_(std::move(cards)) {
    assert(cards_.size() % kCardBytes == 0);
    for (std::size_t i = 0; i < size(); ++i) {
        if (trimmed(card(i).substr(0, kKeywordBytes)) == "END" && !card_value(card(i))) {
            cards_.resize(i * kCardBytes);
        }
    }
}

std::string_view FitsHeader::card(std::size_t index) const {
    return std::string_view(cards_).substr(index * kCardBytes, kCardBytes);
}

std::optional<std::size_t> FitsHeader::index_of(std::string_view keyword) const {
    keyword = trimmed(keyword);
    if (keyword.size() > kKeywordBytes &&
        same_letters(keyword.substr(0, kKeywordBytes), kHierarch)) {
        keyword = trimmed(keyword.substr(kKeywordBytes));
    }
    const bool hierarch =
        keyword.size() > kKeywordBytes || keyword.find(' ') != std::string_view::npos;
    for (std::size_t i = 0; i < size(); ++i) {
        if (is_hierarch(card(i)) == hierarch && same_letters(keyword_of(card(i)), keyword)) {
            return i;
        }
    }
    return std::nullopt;
}

std::optional<CardValue> FitsHeader::find(std::string_view keyword) const {
    const std::optional<std::size_t> found = index_of(keyword);
    if (!found) {
        return std::nullopt;
    }
    std::optional<CardValue> value = card_value(card(*found));
    // A string that ends with '&' goes on in the next card, if that is a CONTINUE card.
    for (std::size_t next = *found + 1;
         value && value->quoted && value->text.ends_with('&') && next < size() &&
         card(next).substr(0, kKeywordBytes) == "CONTINUE";
         ++next) {
        const std::optional<CardValue> more = field_value(card(next).substr(kKeywordBytes));
        if (!more || !more->quoted) {
            break;
        }
        value->text.pop_back();
        value->text += more->text;
        value->closed = value->closed && more->closed;
    }
    return value;
}

}  // namespace straymark::io
