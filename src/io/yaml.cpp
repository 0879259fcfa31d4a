#include "io/yaml.h"

#include <algorithm>
#include <array>
#include <cassert>
#include <charconv>
#include <cmath>
#include <fmt/format.h>
#include <span>

#include "core/error.h"
#include "io/files.h"
#include "io/yaml_tree.h"

namespace straymark::io {
namespace {

constexpr std::int64_t kLargestFile = 1 << 20;
constexpr std::ptrdiff_t kLongestLine = 1 << 16;

bool digit(char c) {
    return c >= '0' && c <= '9';
}

/// Would YAML's core schema read this plain text as a number? (YAML 1.2.2, section 10.3.2, and the
/// leading zeros and underscores of YAML 1.1, which readers still disagree on.)
bool reads_as_number(std::string_view text) {
    if (!text.empty() && (text.front() == '+' || text.front() == '-')) {
        text.remove_prefix(1);
    }
    static constexpr std::array<std::string_view, 6> kSpecial{".inf", ".Inf", ".INF",
                                                              ".nan", ".NaN", ".NAN"};
    if (std::find(kSpecial.begin(), kSpecial.end(), text) != kSpecial.end()) {
        return true;
    }
    if (text.size() > 2 && text[0] == '0' && (text[1] == 'x' || text[1] == 'o')) {
        return std::all_of(text.begin() + 2, text.end(),
                           [](unsigned char c) { return std::isxdigit(c) != 0; });
    }
    const auto skip_digits = [&text] {
        std::size_t count = 0;
        while (!text.empty() && (digit(text.front()) || text.front() == '_')) {
            count += digit(text.front()) ? 1U : 0U;
            text.remove_prefix(1);
        }
        return count;
    };
    if (!text.empty() && text.front() == '_') {
        return false;
    }
    std::size_t digits = skip_digits();
    if (!text.empty() && text.front() == '.') {
        text.remove_prefix(1);
        digits += skip_digits();
    }
    if (digits == 0) {
        return false;
    }
    if (!text.empty() && (text.front() == 'e' || text.front() == 'E')) {
        text.remove_prefix(1);
        if (!text.empty() && (text.front() == '+' || text.front() == '-')) {
            text.remove_prefix(1);
        }
        return skip_digits() > 0 && text.empty();
    }
    return text.empty();
}

bool reads_as_truth_value(std::string_view text) {
    static constexpr std::array<std::string_view, 6> kWords{"true",  "True",  "TRUE",
                                                            "false", "False", "FALSE"};
    return std::find(kWords.begin(), kWords.end(), text) != kWords.end();
}

/// A unit that people use instead: a value in it, times `factor`, is in the file's unit.
struct OtherUnit {
    std::string_view file_unit;
    std::string_view name;
    double factor;
};

constexpr std::array<OtherUnit, 15> kOtherUnits{{{"mm", "metres", 1e3},
                                                 {"mm", "centimetres", 10.0},
                                                 {"mm", "micrometres", 1e-3},
                                                 {"um", "millimetres", 1e3},
                                                 {"um", "metres", 1e6},
                                                 {"um", "nanometres", 1e-3},
                                                 {"nm", "angstroms", 0.1},
                                                 {"nm", "micrometres", 1e3},
                                                 {"nm", "metres", 1e9},
                                                 {"m", "kilometres", 1e3},
                                                 {"m", "millimetres", 1e-3},
                                                 {"deg", "arc minutes", 1.0 / 60.0},
                                                 {"deg", "arc seconds", 1.0 / 3600.0},
                                                 {"s", "milliseconds", 1e-3},
                                                 {"s", "microseconds", 1e-6}}};

bool in_range(double value, const NumberRange& range) {
    return (range.least_excluded ? value > range.least : value >= range.least) &&
           value <= range.most;
}

std::string range_text(const NumberRange& range) {
    return fmt::format("a number {} {} and at most {}{}{}",
                       range.least_excluded ? "above" : "of at least", range.least, range.most,
                       range.unit.empty() ? "" : " ", range.unit);
}

std::string unit_hint(double value, const NumberRange& range) {
    for (const OtherUnit& other : kOtherUnits) {
        if (other.file_unit == range.unit && in_range(value * other.factor, range)) {
            return fmt::format("is it in {}? Then write {:.10g}", other.name, value * other.factor);
        }
    }
    return "";
}

/// Edits (insert, delete, replace, swap neighbours) that turn one word into the other.
std::size_t edit_distance(std::string_view a, std::string_view b) {
    std::vector<std::vector<std::size_t>> d(a.size() + 1, std::vector<std::size_t>(b.size() + 1));
    for (std::size_t i = 0; i <= a.size(); ++i) {
        for (std::size_t j = 0; j <= b.size(); ++j) {
            if (i == 0 || j == 0) {
                d[i][j] = i + j;
                continue;
            }
            d[i][j] = std::min({d[i - 1][j] + 1, d[i][j - 1] + 1,
                                d[i - 1][j - 1] + (a[i - 1] == b[j - 1] ? 0U : 1U)});
            if (i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1]) {
                d[i][j] = std::min(d[i][j], d[i - 2][j - 2] + 1);
            }
        }
    }
    return d[a.size()][b.size()];
}

/// A value for a message: at most 64 bytes, no control characters.
std::string shown(std::string_view text) {
    std::string out(text.substr(0, 64));
    std::replace_if(
        out.begin(), out.end(), [](unsigned char c) { return c < 0x20; }, ' ');
    return out.size() < text.size() ? out + "..." : out;
}

/// yaml-cpp reads a line to its end before it knows whether a key began there, at some microseconds
/// a token: bounded lines bound the time that a hostile file takes.
void require_short_lines(const std::string& path, const std::string& text) {
    int line = 1;
    for (auto begin = text.begin(); begin != text.end(); ++line) {
        const auto end = std::find(begin, text.end(), '\n');
        if (end - begin > kLongestLine) {
            throw InputError({path, fmt::format("line {}", line),
                              fmt::format("a line of {} bytes", end - begin),
                              fmt::format("at most {}", kLongestLine), "break the line"});
        }
        begin = end == text.end() ? end : end + 1;
    }
}

/// yaml-cpp ends the text at a byte 4 and replaces what is not UTF-8: look first.
void require_plain_utf8(const std::string& path, const std::string& text) {
    int line = 1;
    std::size_t follow = 0;
    const auto refuse = [&](const std::string& found) {
        throw InputError({path, fmt::format("line {}", line), found, "UTF-8 text", ""});
    };
    for (const char raw : text) {
        const auto byte = static_cast<unsigned char>(raw);
        if (follow > 0) {
            if ((byte & 0xC0U) != 0x80U) {
                refuse("bytes that are not UTF-8");
            }
            --follow;
            continue;
        }
        if (byte == '\n') {
            ++line;
        } else if ((byte < 0x20U && byte != '\t' && byte != '\r') || byte == 0x7FU) {
            refuse(fmt::format("a control byte ({})", byte));
        } else if (byte >= 0x80U) {
            if (byte < 0xC2U || byte > 0xF4U) {
                refuse("bytes that are not UTF-8");
            }
            follow = byte < 0xE0U ? 1 : byte < 0xF0U ? 2 : 3;
        }
    }
    if (follow > 0) {
        refuse("bytes that are not UTF-8");
    }
}

std::string joined(const std::string& name, std::string_view key) {
    return name.empty() ? std::string(key) : fmt::format("{}.{}", name, key);
}

}  // namespace

std::string_view nearest_word(std::string_view typed, const std::vector<std::string_view>& words) {
    constexpr std::size_t kLongestWord = 64;
    constexpr std::size_t kShortestPrefix = 3;
    std::string_view nearest;
    std::size_t least = std::max<std::size_t>(1, (typed.size() + 1) / 3) + 1;
    if (typed.size() > kLongestWord) {
        return nearest;
    }
    for (const std::string_view word : words) {
        const bool begun = std::min(typed.size(), word.size()) >= kShortestPrefix &&
                           (word.starts_with(typed) || typed.starts_with(word));
        const std::size_t distance = begun ? 1 : edit_distance(typed, word);
        if (distance < least) {
            least = distance;
            nearest = word;
        }
    }
    return nearest;
}

const YamlNode* YamlNode::child(std::string_view key) const {
    const auto found =
        std::find_if(keys.begin(), keys.end(), [key](const YamlKey& k) { return k.text == key; });
    return found == keys.end() ? nullptr
                               : &children[static_cast<std::size_t>(found - keys.begin())];
}

void YamlValue::refuse(const std::string& expected, const std::string& advice,
                       const std::string& found) const {
    std::string what = found;
    if (what.empty()) {
        switch (node_->kind) {
            case YamlNode::Kind::null:
                what = "nothing";
                break;
            case YamlNode::Kind::scalar:
                what =
                    node_->quoted ? fmt::format("\"{}\"", shown(node_->text)) : shown(node_->text);
                break;
            case YamlNode::Kind::sequence:
                what = "a list";
                break;
            case YamlNode::Kind::mapping:
                what = "a mapping";
                break;
        }
    }
    std::string place = fmt::format("line {}, column {}", node_->line, node_->column);
    if (!name_.empty()) {
        place += fmt::format(", {}", shown(name_));
    }
    throw InputError({*path_, place, what, expected, advice});
}

void YamlValue::refuse_key(const YamlKey& key, const std::string& expected,
                           const std::string& advice) const {
    std::string place = fmt::format("line {}, column {}", key.line, key.column);
    if (!name_.empty()) {
        place += fmt::format(", {}", shown(name_));
    }
    throw InputError(
        {*path_, place, fmt::format("unknown key '{}'", shown(key.text)), expected, advice});
}

double YamlValue::number(const NumberRange& range) const {
    std::string_view text = node_->text;
    if (node_->kind != YamlNode::Kind::scalar || !reads_as_number(text)) {
        refuse(range_text(range));
    }
    if (node_->quoted) {
        refuse(range_text(range), "write it without quotes");
    }
    if (text.front() == '+') {
        text.remove_prefix(1);
    }
    const std::string_view digits = text.substr(text.front() == '-' ? 1 : 0);
    if (digits.size() > 1 && digits[0] == '0' && digit(digits[1])) {
        refuse(range_text(range), "write it without leading zeros");
    }
    double value = 0.0;
    const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
    if (error != std::errc() || end != text.data() + text.size() || !std::isfinite(value)) {
        refuse(range_text(range));
    }
    if (!in_range(value, range)) {
        refuse(range_text(range), unit_hint(value, range));
    }
    return value;
}

int YamlValue::integer(int least, int most) const {
    const double value = number({static_cast<double>(least), static_cast<double>(most)});
    if (value != std::floor(value)) {
        refuse(fmt::format("a whole number from {} to {}", least, most));
    }
    return static_cast<int>(value);
}

bool YamlValue::boolean() const {
    const std::string expected = "true or false";
    if (node_->kind != YamlNode::Kind::scalar || node_->quoted) {
        refuse(expected);
    }
    if (!reads_as_truth_value(node_->text)) {
        refuse(expected);
    }
    return node_->text.front() == 't' || node_->text.front() == 'T';
}

std::string YamlValue::text(std::size_t longest) const {
    if (node_->kind == YamlNode::Kind::null) {
        refuse("a text", "a text that reads as nothing needs quotes");
    }
    if (node_->kind != YamlNode::Kind::scalar || node_->text.empty()) {
        refuse("a text");
    }
    const std::string& text = node_->text;
    if (!node_->quoted && (reads_as_number(text) || reads_as_truth_value(text))) {
        refuse("a text", fmt::format("put it in quotes: \"{}\"", shown(text)));
    }
    if (text.size() > longest) {
        refuse(fmt::format("a text of at most {} bytes", longest));
    }
    if (std::any_of(text.begin(), text.end(), [](unsigned char c) { return c < 0x20; })) {
        refuse("a text of one line, without tabs");
    }
    return text;
}

bool YamlValue::is_word(std::string_view word) const {
    return node_->kind == YamlNode::Kind::scalar && node_->text == word;
}

void YamlValue::refuse_choice(const std::vector<std::string_view>& words) const {
    std::string advice;
    if (node_->kind == YamlNode::Kind::scalar) {
        const std::string_view nearest = nearest_word(node_->text, words);
        if (!nearest.empty()) {
            advice = fmt::format("did you mean '{}'?", nearest);
        }
    }
    refuse(fmt::format("one of: {}", fmt::join(words, ", ")), advice);
}

const YamlNode& YamlValue::required_kind(YamlNode::Kind kind) const {
    if (node_->kind != kind) {
        refuse(kind == YamlNode::Kind::mapping ? "a mapping (key: value)" : "a list [...]");
    }
    return *node_;
}

std::vector<YamlValue> YamlValue::items(std::size_t least, std::size_t most) const {
    const YamlNode& list = required_kind(YamlNode::Kind::sequence);
    const std::size_t count = list.children.size();
    if (count < least || count > most) {
        refuse(least == most ? fmt::format("a list of {}", least)
                             : fmt::format("a list of {} to {}", least, most),
               "", fmt::format("a list of {}", count));
    }
    std::vector<YamlValue> values;
    values.reserve(count);
    for (std::size_t i = 0; i < count; ++i) {
        values.emplace_back(*path_, list.children[i], fmt::format("{}[{}]", name_, i + 1));
    }
    return values;
}

YamlMapping YamlValue::mapping(std::initializer_list<std::string_view> known_keys) const {
    return {*this, known_keys};
}

std::vector<std::pair<std::string, YamlValue>> YamlValue::entries(std::size_t least,
                                                                  std::size_t most) const {
    const YamlNode& map = required_kind(YamlNode::Kind::mapping);
    std::vector<std::pair<std::string, YamlValue>> values;
    for (std::size_t i = 0; i < map.keys.size(); ++i) {
        const std::string& key = map.keys[i].text;
        if (!key.starts_with("x_")) {
            values.emplace_back(key, YamlValue(*path_, map.children[i], joined(name_, key)));
        }
    }
    if (values.size() < least || values.size() > most) {
        refuse(fmt::format("{} to {} entries", least, most), "",
               fmt::format("{} entries", values.size()));
    }
    return values;
}

YamlMapping::YamlMapping(YamlValue value, std::vector<std::string_view> known_keys)
    : value_(std::move(value)), known_keys_(std::move(known_keys)) {
    const YamlNode& map = value_.required_kind(YamlNode::Kind::mapping);
    for (const YamlKey& key : map.keys) {
        if (key.text.starts_with("x_") ||
            std::find(known_keys_.begin(), known_keys_.end(), key.text) != known_keys_.end()) {
            continue;
        }
        const std::string_view nearest = nearest_word(key.text, known_keys_);
        value_.refuse_key(key, fmt::format("one of: {}", fmt::join(known_keys_, ", ")),
                          nearest.empty() ? "a key of your own must begin with x_"
                                          : fmt::format("did you mean '{}'?", nearest));
    }
}

YamlValue YamlMapping::required(std::string_view key) const {
    if (const auto value = optional(key)) {
        return *value;
    }
    value_.refuse(fmt::format("a key '{}'", key), fmt::format("add '{}: ...'", key), "no such key");
}

std::optional<YamlValue> YamlMapping::optional(std::string_view key) const {
    assert(std::find(known_keys_.begin(), known_keys_.end(), key) != known_keys_.end());
    const YamlNode* child = value_.node_->child(key);
    if (child == nullptr) {
        return std::nullopt;
    }
    YamlValue value(*value_.path_, *child, joined(value_.name_, key));
    if (child->kind == YamlNode::Kind::null) {
        value.refuse("a value", "give the value, or delete the key");
    }
    return value;
}

YamlFile::YamlFile(const std::string& path) : YamlFile(path, read_text(path, kLargestFile)) {}

YamlFile::YamlFile(std::string path, const std::string& text)
    : path_(std::move(path)), digest_(bytes_digest(std::as_bytes(std::span(text)))) {
    require_short_lines(path_, text);
    require_plain_utf8(path_, text);
    root_ = parse_yaml(path_, text);
}

void YamlFile::require_format(std::string_view family, int version) const {
    const std::string expected = fmt::format("format: {}/{}", family, version);
    const YamlNode* node = root_.child("format");
    if (node == nullptr) {
        root().refuse(expected, "is this the right file?", "no key 'format'");
    }
    const YamlValue value(path_, *node, "format");
    const std::string_view text = node->text;
    const std::string prefix = fmt::format("{}/", family);
    if (!text.starts_with(prefix)) {
        value.refuse(expected, "is this the right file?");
    }
    const std::string_view number = text.substr(prefix.size());
    int written = 0;
    const auto [end, error] =
        std::from_chars(number.data(), number.data() + number.size(), written);
    if (error != std::errc() || end != number.data() + number.size() || written < 1) {
        value.refuse(expected);
    }
    if (written > version) {
        value.refuse(expected, "the file is for a newer straymark; update the program");
    }
    if (written < version) {
        value.refuse(expected, "the file is for an older straymark; see docs/CHANGELOG.md");
    }
}

}  // namespace straymark::io
