#include "io/header_writer.h"

#include <algorithm>
#include <array>
#include <cassert>
#include <cmath>
#include <fmt/format.h>
#include <vector>

#include "core/error.h"

namespace straymark::io {
namespace {

constexpr std::size_t kKeyword = 8;
constexpr std::size_t kValueColumns = 20;                             // of the fixed format
constexpr std::size_t kLongestString = kFitsCard - kKeyword - 2 - 2;  // between the quotes
constexpr std::size_t kShortestString = 8;                            // FITS 4.0 section 4.2.1.1
constexpr std::size_t kLongestComment = 47;

bool printable(char c) {
    return c >= ' ' && c <= '~';
}

void append_percent(std::string& out, char c) {
    out += fmt::format("%{:02X}", static_cast<unsigned char>(c));
}

std::string_view keyword_of(std::string_view card) {
    std::string_view keyword = card.substr(0, std::min(card.size(), kKeyword));
    while (!keyword.empty() && keyword.back() == ' ') {
        keyword.remove_suffix(1);
    }
    return keyword;
}

bool commentary(std::string_view keyword) {
    return keyword.empty() || keyword == "COMMENT" || keyword == "HISTORY";
}

/// Keywords that say how the bytes of a unit are laid out: never taken from elsewhere.
bool structural(std::string_view keyword) {
    constexpr std::array<std::string_view, 16> kWhole = {
        "SIMPLE", "XTENSION", "EXTEND",  "PCOUNT",  "GCOUNT", "GROUPS",  "TFIELDS",  "THEAP",
        "END",    "CHECKSUM", "DATASUM", "EXTNAME", "EXTVER", "INHERIT", "CONTINUE", "BLOCKED"};
    constexpr std::array<std::string_view, 15> kNumbered = {
        "BITPIX", "NAXIS", "TTYPE",  "TFORM", "TUNIT", "TDIM",    "TNULL",  "TSCAL",
        "TZERO",  "TDISP", "BSCALE", "BZERO", "BLANK", "DATAMIN", "DATAMAX"};
    const std::string_view stem = keyword.substr(0, keyword.find_last_not_of("0123456789") + 1);
    return std::find(kWhole.begin(), kWhole.end(), keyword) != kWhole.end() ||
           std::find(kNumbered.begin(), kNumbered.end(), stem) != kNumbered.end() ||
           keyword.starts_with('Z');  // the tile compression's own
}

}  // namespace

std::string printable_text(std::string_view text) {
    std::string out;
    out.reserve(text.size());
    for (const char c : text) {
        if (printable(c)) {
            out += c;
        } else {
            append_percent(out, c);
        }
    }
    return out;
}

std::string escaped_text(std::string_view text) {
    std::string out;
    out.reserve(text.size());
    for (std::size_t i = 0; i < text.size(); ++i) {
        const bool last_blank = text[i] == ' ' && i + 1 == text.size();
        if (printable(text[i]) && text[i] != '%' && !last_blank) {
            out += text[i];
        } else {
            append_percent(out, text[i]);
        }
    }
    return out;
}

std::string restored_text(std::string_view text) {
    const auto digit = [](char c) {
        return c >= '0' && c <= '9' ? c - '0' : (c >= 'A' && c <= 'F' ? c - 'A' + 10 : -1);
    };
    std::string out;
    out.reserve(text.size());
    for (std::size_t i = 0; i < text.size(); ++i) {
        if (text[i] == '%' && i + 2 < text.size() && digit(text[i + 1]) >= 0 &&
            digit(text[i + 2]) >= 0) {
            out += static_cast<char>(digit(text[i + 1]) * 16 + digit(text[i + 2]));
            i += 2;
        } else {
            out += text[i];
        }
    }
    return out;
}

void HeaderCards::append(std::string_view keyword, std::string_view value,
                         std::string_view comment) {
    assert(!keyword.empty() && keyword.size() <= kKeyword && comment.size() <= kLongestComment);
    const std::string_view indicator = keyword == "CONTINUE" ? "  " : "= ";
    std::string card = fmt::format("{:<8}{}{}", keyword, indicator, value);
    if (!comment.empty()) {
        // Comments line up behind the fixed-format value.
        card.resize(std::max(card.size(), kKeyword + 2 + kValueColumns), ' ');
        card += fmt::format(" / {}", comment);
    }
    assert(card.size() <= kFitsCard);
    card.resize(kFitsCard, ' ');
    text_ += card;
}

void HeaderCards::add_logical(std::string_view keyword, bool value, std::string_view comment) {
    append(keyword, fmt::format("{:>{}}", value ? 'T' : 'F', kValueColumns), comment);
}

void HeaderCards::add_integer(std::string_view keyword, std::int64_t value,
                              std::string_view comment) {
    append(keyword, fmt::format("{:>{}}", value, kValueColumns), comment);
}

void HeaderCards::add_real(std::string_view keyword, double value, std::string_view comment) {
    assert(std::isfinite(value));
    std::string digits = fmt::format("{}", value);
    std::replace(digits.begin(), digits.end(), 'e', 'E');
    if (digits.find_first_of(".E") == std::string::npos) {
        digits += ".0";
    }
    append(keyword, fmt::format("{:>{}}", digits, kValueColumns), comment);
}

void HeaderCards::add_text(std::string_view keyword, std::string_view value,
                           std::string_view comment) {
    std::vector<std::string> pieces(1);
    for (const char c : printable_text(value)) {
        const std::size_t length = c == '\'' ? 2 : 1;
        // One column is kept for the ampersand that announces the next piece.
        if (pieces.back().size() + length > kLongestString - 1) {
            pieces.emplace_back();
        }
        pieces.back().append(length, c);
    }
    const std::size_t quoted = std::max(pieces.back().size() + 2, kValueColumns);
    if (!comment.empty() && kKeyword + 2 + quoted + 3 + comment.size() > kFitsCard) {
        // The comment takes a card of its own, with the last character: an empty piece would not be
        // taken for a continuation by every reader.
        const std::size_t kept = pieces.back().size() - (pieces.back().back() == '\'' ? 2 : 1);
        pieces.push_back(pieces.back().substr(kept));
        pieces[pieces.size() - 2].resize(kept);
    }
    if (pieces.size() > 1 && !holds("LONGSTRN")) {
        append("LONGSTRN", "'OGIP 1.0'", "strings may go on in CONTINUE cards");
    }
    for (std::size_t i = 0; i < pieces.size(); ++i) {
        const bool last = i + 1 == pieces.size();
        const std::string text = last ? fmt::format("'{:<{}}'", pieces[i], kShortestString)
                                      : fmt::format("'{}&'", pieces[i]);
        append(i == 0 ? keyword : "CONTINUE", text, last ? comment : std::string_view{});
    }
}

bool HeaderCards::add_card(std::string_view card) {
    if (card.size() > kFitsCard || !std::all_of(card.begin(), card.end(), printable)) {
        throw InputError({"", "header card", fmt::format("'{}'", printable_text(card)),
                          "at most 80 printable ASCII characters", ""});
    }
    const std::string_view keyword = keyword_of(card);
    if (structural(keyword) || (!commentary(keyword) && holds(keyword))) {
        return false;
    }
    text_ += card;
    text_.append(kFitsCard - card.size(), ' ');
    return true;
}

bool HeaderCards::holds(std::string_view keyword) const {
    const std::string_view text = text_;
    for (std::size_t at = 0; at < text.size(); at += kFitsCard) {
        if (keyword_of(text.substr(at, kFitsCard)) == keyword) {
            return true;
        }
    }
    return false;
}

}  // namespace straymark::io
