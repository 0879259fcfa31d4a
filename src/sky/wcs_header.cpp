#include "sky/wcs_header.h"

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <fmt/format.h>
#include <optional>
#include <string_view>

#include "core/error.h"

namespace straymark {
namespace {

constexpr std::size_t kCardLength = 80;
constexpr std::size_t kKeywordLength = 8;
constexpr std::size_t kLongestText = 68;

std::string_view without_trailing_blanks(std::string_view text) {
    const std::size_t last = text.find_last_not_of(' ');
    return text.substr(0, last == std::string_view::npos ? 0 : last + 1);
}

std::string_view trimmed(std::string_view text) {
    const std::size_t first = text.find_first_not_of(' ');
    return without_trailing_blanks(text.substr(std::min(first, text.size())));
}

/// Does `keyword` consist of `pattern`, where '#' stands for one or two digits?
bool matches(std::string_view keyword, std::string_view pattern) {
    const auto digit = [](char c) { return c >= '0' && c <= '9'; };
    std::size_t k = 0;
    for (const char p : pattern) {
        if (p != '#') {
            if (k >= keyword.size() || keyword[k++] != p) {
                return false;
            }
            continue;
        }
        if (k >= keyword.size() || !digit(keyword[k])) {
            return false;
        }
        k += k + 1 < keyword.size() && digit(keyword[k + 1]) ? 2 : 1;
    }
    return k == keyword.size();
}

template <std::size_t N>
bool matches_any(std::string_view keyword, const std::array<std::string_view, N>& patterns) {
    return std::any_of(patterns.begin(), patterns.end(),
                       [keyword](std::string_view pattern) { return matches(keyword, pattern); });
}

constexpr std::array<std::string_view, 5> kTextKeywords{"CTYPE#", "CUNIT#", "RADESYS", "RADECSYS",
                                                        "WCSNAME"};
constexpr std::array<std::string_view, 20> kNumberKeywords{
    "WCSAXES", "CRVAL#",  "CRPIX#",   "CDELT#",  "CROTA#",  "CD#_#",   "PC#_#",
    "PV#_#",   "LONPOLE", "LATPOLE",  "EQUINOX", "EPOCH",   "A_#_#",   "B_#_#",
    "A_ORDER", "AP_#_#",  "AP_ORDER", "BP_#_#",  "B_ORDER", "BP_ORDER"};
/// Distortions kept outside the coordinate system; without them the positions would be wrong.
constexpr std::array<std::string_view, 5> kLookUpKeywords{"CPDIS#", "CQDIS#", "D2IMDIS#", "DP#",
                                                          "DQ#"};

class CardParser {
public:
    CardParser(const std::string& file, const std::string& place) : file_(file), place_(place) {}

    [[nodiscard]] std::optional<WcsCard> parse(std::string_view card) const {
        const std::string_view keyword = without_trailing_blanks(card.substr(0, kKeywordLength));
        const bool is_text = matches_any(keyword, kTextKeywords);
        if (matches_any(keyword, kLookUpKeywords)) {
            refuse(keyword, "a distortion by look-up table", "TAN, TPV or TAN-SIP");
        }
        if (!is_text && !matches_any(keyword, kNumberKeywords)) {
            return std::nullopt;
        }
        if (card.size() < kKeywordLength + 2 || card.substr(kKeywordLength, 2) != "= ") {
            refuse(keyword, fmt::format("'{}'", printable(card)), "'= ' in columns 9 and 10");
        }
        const std::string_view value = trimmed(card.substr(kKeywordLength + 2));
        WcsCard out{std::string(keyword), is_text, "", 0.0};
        if (is_text) {
            out.text = text_value(keyword, value);
        } else {
            out.number = number_value(keyword, value);
        }
        return out;
    }

    [[noreturn]] void refuse(std::string_view keyword, const std::string& found,
                             const std::string& expected) const {
        throw InputError({file_, fmt::format("{}{}{}", place_, place_.empty() ? "" : ", ", keyword),
                          found, expected,
                          "correct the card, or remove the coordinate system from the header"});
    }

private:
    static std::string printable(std::string_view text) {
        std::string out(trimmed(text.substr(0, kCardLength)));
        std::replace_if(
            out.begin(), out.end(), [](char c) { return c < ' ' || c > '~'; }, '?');
        return out;
    }

    [[nodiscard]] std::string text_value(std::string_view keyword, std::string_view value) const {
        const auto unclosed = [&] {
            refuse(keyword, fmt::format("{} (a quote that is not closed)", printable(value)),
                   "a text in quotes");
        };
        if (value.empty() || value.front() != '\'') {
            refuse(keyword, fmt::format("{}", printable(value)), "a text in quotes");
        }
        std::string text;
        std::size_t at = 1;
        for (;; ++at) {
            if (at >= value.size()) {
                unclosed();
            }
            if (value[at] == '\'') {
                if (at + 1 >= value.size() || value[at + 1] != '\'') {
                    break;
                }
                ++at;
            }
            if (value[at] < ' ' || value[at] > '~') {
                refuse(keyword, fmt::format("{}", printable(value)), "printable characters");
            }
            text += value[at];
        }
        const std::string_view rest = trimmed(value.substr(at + 1));
        if (!rest.empty() && rest.front() != '/') {
            unclosed();
        }
        return std::string(without_trailing_blanks(text));
    }

    [[nodiscard]] double number_value(std::string_view keyword, std::string_view value) const {
        std::string digits(without_trailing_blanks(value.substr(0, value.find('/'))));
        std::replace_if(
            digits.begin(), digits.end(), [](char c) { return c == 'D' || c == 'd'; }, 'E');
        const std::size_t sign = !digits.empty() && digits.front() == '+' ? 1 : 0;
        const char* const end = digits.data() + digits.size();
        double number = 0.0;
        const auto [stopped, error] = std::from_chars(digits.data() + sign, end, number);
        if (digits.size() == sign || error != std::errc() || stopped != end ||
            !std::isfinite(number)) {
            refuse(keyword, fmt::format("'{}'", printable(value)), "a finite number");
        }
        return number;
    }

    const std::string& file_;
    const std::string& place_;
};

/// The settled cards' own questions.
class Conventions {
public:
    Conventions(std::vector<WcsCard>& cards, const CardParser& messages)
        : cards_(cards), messages_(messages) {}

    void settle() {
        check_axes();
        settle_projection();
        check_frame();
    }

private:
    [[nodiscard]] WcsCard* find(std::string_view keyword) const {
        const auto found = std::find_if(cards_.begin(), cards_.end(), [keyword](const WcsCard& c) {
            return c.keyword == keyword;
        });
        return found == cards_.end() ? nullptr : &*found;
    }
    [[nodiscard]] bool any(std::string_view pattern) const {
        return std::any_of(cards_.begin(), cards_.end(), [pattern](const WcsCard& card) {
            return matches(card.keyword, pattern);
        });
    }
    /// The number after the underscore of a PVi_m card.
    static int parameter(const WcsCard& card) {
        const std::size_t from = card.keyword.find('_') + 1;
        int m = 0;
        std::from_chars(card.keyword.data() + from, card.keyword.data() + card.keyword.size(), m);
        return m;
    }

    void check_axes() const {
        for (const WcsCard& card : cards_) {
            const bool by_axis = card.keyword.starts_with("C") || card.keyword.starts_with("P");
            const std::size_t digit = card.keyword.find_first_of("0123456789");
            if (by_axis && digit != std::string::npos &&
                card.keyword.find_first_not_of("12", digit) == digit) {
                messages_.refuse(card.keyword, "a third axis", "an image of two axes");
            }
        }
        const WcsCard* axes = find("WCSAXES");
        if (axes != nullptr && axes->number != 2.0) {
            messages_.refuse("WCSAXES", fmt::format("{}", axes->number), "2");
        }
    }

    void settle_projection() {
        WcsCard* const first = find("CTYPE1");
        WcsCard* const second = find("CTYPE2");
        if (first == nullptr || second == nullptr) {
            messages_.refuse(first == nullptr ? "CTYPE1" : "CTYPE2", "no such card",
                             "a celestial coordinate type");
        }
        const std::string code = projection_code(*first);
        if (projection_code(*second) != code) {
            messages_.refuse("CTYPE2", fmt::format("'{}'", second->text),
                             fmt::format("the projection of CTYPE1 ('{}')", first->text));
        }
        const bool sip_cards = any("A_ORDER") || any("B_ORDER");
        if (code == "TAN-SIP" && polynomial_parameters()) {
            messages_.refuse("CTYPE1", "TAN-SIP together with PV cards", "one distortion only");
        }
        if (code != "TAN-SIP" && sip_cards) {
            messages_.refuse("CTYPE1", fmt::format("'{}' together with A_ORDER", first->text),
                             "-SIP at the end of CTYPE1 and CTYPE2");
        }
        if (code == "TAN" && polynomial_parameters()) {
            for (WcsCard* type : {first, second}) {
                type->text = type->text.substr(0, 5) + "TPV";
            }
        }
    }

    /// "TAN", "TPV" or "TAN-SIP", of an axis that is right ascension or declination.
    [[nodiscard]] std::string projection_code(const WcsCard& type) const {
        const std::string_view text = type.text;
        const bool equatorial = text.starts_with("RA---") || text.starts_with("DEC--");
        std::string code(equatorial ? text.substr(5) : "");
        if (code == "TNX" || code == "ZPX") {
            messages_.refuse(type.keyword,
                             fmt::format("'{}' ({} is not a standard projection)", text, code),
                             "TAN, TPV or TAN-SIP");
        }
        if (code != "TAN" && code != "TPV" && code != "TAN-SIP") {
            messages_.refuse(type.keyword, fmt::format("'{}'", text),
                             "RA and DEC in the projection TAN, TPV or TAN-SIP");
        }
        return code;
    }

    /// Are there PV cards that plain TAN has no use for? (PV1_0 to PV1_4 alone may state the
    /// native reference point and pole.)
    [[nodiscard]] bool polynomial_parameters() const {
        constexpr int kLastStandard = 4;
        return std::any_of(cards_.begin(), cards_.end(), [](const WcsCard& card) {
            return matches(card.keyword, "PV2_#") ||
                   (matches(card.keyword, "PV1_#") && parameter(card) > kLastStandard);
        });
    }

    void check_frame() const {
        const WcsCard* frame = find("RADESYS");
        frame = frame != nullptr ? frame : find("RADECSYS");
        const WcsCard* equinox = find("EQUINOX");
        equinox = equinox != nullptr ? equinox : find("EPOCH");
        const bool fk5 = frame == nullptr ? equinox != nullptr : frame->text == "FK5";
        if (frame != nullptr && !fk5 && frame->text != "ICRS") {
            messages_.refuse(frame->keyword, fmt::format("'{}'", frame->text),
                             "ICRS, or FK5 of equinox 2000");
        }
        // FK5 at 2000 lies within some 0.02 arcsec of ICRS; of another equinox it does not.
        if (fk5 && equinox != nullptr && equinox->number != 2000.0) {
            messages_.refuse(equinox->keyword, fmt::format("{}", equinox->number), "2000");
        }
    }

    std::vector<WcsCard>& cards_;
    const CardParser& messages_;
};

}  // namespace

std::vector<WcsCard> parse_wcs_cards(const std::vector<std::string>& cards, const std::string& file,
                                     const std::string& place) {
    const CardParser parser(file, place);
    std::vector<WcsCard> out;
    for (const std::string& text : cards) {
        std::optional<WcsCard> card = parser.parse(std::string_view(text).substr(0, kCardLength));
        if (!card) {
            continue;
        }
        const auto same = std::find_if(out.begin(), out.end(), [&card](const WcsCard& other) {
            return other.keyword == card->keyword;
        });
        if (same == out.end()) {
            out.push_back(std::move(*card));
        } else if (same->text != card->text || same->number != card->number) {
            parser.refuse(card->keyword, "two cards that disagree", "one");
        }
    }
    return out;
}

void settle_conventions(std::vector<WcsCard>& cards, const std::string& file,
                        const std::string& place) {
    const CardParser messages(file, place);
    Conventions(cards, messages).settle();
}

std::string fits_card(const WcsCard& card) {
    std::string value;
    if (card.is_text) {
        for (const char c : card.text.substr(0, kLongestText)) {
            value += c == '\'' ? "''" : std::string(1, c);
        }
        value = fmt::format("'{:<8}'", value);
    } else {
        const bool whole = card.number == std::rint(card.number) && std::abs(card.number) < 1e9;
        value = whole ? fmt::format("{:>20}", static_cast<long>(card.number))
                      : fmt::format("{:>20}", fmt::format("{:.17G}", card.number));
    }
    return fmt::format("{:<80.80}", fmt::format("{:<8}= {}", card.keyword, value));
}

}  // namespace straymark
