#pragma once

#include <cstddef>
#include <initializer_list>
#include <optional>
#include <string>
#include <string_view>
#include <utility>
#include <vector>

/// YAML read strictly. The text is parsed by yaml-cpp into a plain tree that keeps each value's
/// line and column; whatever could mean two things is refused: duplicate keys, aliases, anchors,
/// tags, several documents, numbers with leading zeros, a text that reads as a number. What a
/// reader did not ask for is an unknown key. Every error is an InputError with line and column.

namespace straymark::io {

struct YamlKey {
    std::string text;
    int line = 1;    ///< 1-based
    int column = 1;  ///< 1-based
};

/// One value of the tree. A mapping's `keys` and `children` correspond.
struct YamlNode {
    enum class Kind { null, scalar, sequence, mapping };
    Kind kind = Kind::null;
    bool quoted = false;  ///< a scalar in quotes or a block: never a number
    int line = 1;         ///< 1-based
    int column = 1;       ///< 1-based
    std::string text;     ///< of a scalar
    std::vector<YamlKey> keys;
    std::vector<YamlNode> children;
    [[nodiscard]] const YamlNode* child(std::string_view key) const;  ///< null where absent
};

/// Where a number must lie. Bounds are inclusive unless said otherwise; the unit serves the message
/// and its hint ("8280 would fit: is it in metres?"): mm, um, nm, m, deg, s, or "".
struct NumberRange {
    double least = 0.0;
    double most = 0.0;
    std::string_view unit = {};
    bool least_excluded = false;
};

class YamlMapping;

/// A value on its way to becoming something typed. Refers to the tree and the path it was given.
class YamlValue {
public:
    YamlValue(const std::string& path, const YamlNode& node, std::string name)
        : path_(&path), node_(&node), name_(std::move(name)) {}

    /// A plain number, finite and in the range.
    [[nodiscard]] double number(const NumberRange& range) const;
    /// A number without a fractional part.
    [[nodiscard]] int integer(int least, int most) const;
    /// true or false; yes, no, on, off are refused.
    [[nodiscard]] bool boolean() const;
    /// A text of one line, not empty, at most `longest` bytes, which YAML could not read as a
    /// number, a truth value or nothing (such a text needs quotes).
    [[nodiscard]] std::string text(std::size_t longest = 1024) const;
    /// One of the listed words.
    template <class Choice>
    [[nodiscard]] Choice choice(
        std::initializer_list<std::pair<std::string_view, Choice>> choices) const {
        std::vector<std::string_view> words;
        for (const auto& [word, value] : choices) {
            if (is_word(word)) {
                return value;
            }
            words.push_back(word);
        }
        refuse_choice(words);
    }
    /// The items of a sequence, least to most of them.
    [[nodiscard]] std::vector<YamlValue> items(std::size_t least, std::size_t most) const;
    /// A mapping that may have these keys and any that begins with "x_"; others are refused.
    [[nodiscard]] YamlMapping mapping(std::initializer_list<std::string_view> known_keys) const;
    /// The entries of a mapping whose keys are free names, least to most of them.
    [[nodiscard]] std::vector<std::pair<std::string, YamlValue>> entries(std::size_t least,
                                                                         std::size_t most) const;
    [[nodiscard]] bool is_mapping() const { return node_->kind == YamlNode::Kind::mapping; }

    /// Throws InputError at this value. An empty `found` shows the value itself.
    [[noreturn]] void refuse(const std::string& expected, const std::string& advice = "",
                             const std::string& found = "") const;

private:
    friend class YamlMapping;
    [[nodiscard]] bool is_word(std::string_view word) const;
    [[noreturn]] void refuse_key(const YamlKey& key, const std::string& expected,
                                 const std::string& advice) const;
    [[noreturn]] void refuse_choice(const std::vector<std::string_view>& words) const;
    [[nodiscard]] const YamlNode& required_kind(YamlNode::Kind kind) const;

    const std::string* path_;
    const YamlNode* node_;
    std::string name_;  ///< "telescope.focal_length_mm", for messages
};

/// A mapping whose keys are known to be allowed. Asking for a key that was not listed is a bug.
class YamlMapping {
public:
    YamlMapping(YamlValue value, std::vector<std::string_view> known_keys);
    [[nodiscard]] YamlValue required(std::string_view key) const;
    /// Nothing where the key is absent; a key with an empty value is refused.
    [[nodiscard]] std::optional<YamlValue> optional(std::string_view key) const;
    [[nodiscard]] const YamlValue& value() const { return value_; }

private:
    YamlValue value_;
    std::vector<std::string_view> known_keys_;
};

/// A parsed file. Not copied: its values refer to it.
class YamlFile {
public:
    /// Throws InputError: not a regular file, over 1 MiB or 64 KiB in a line, not UTF-8, not YAML,
    /// nested deeper than 32, over 200,000 values or 10,000 keys of one mapping, or ambiguous as
    /// described above.
    explicit YamlFile(const std::string& path);
    /// The same for text in memory; `path` serves the messages.
    YamlFile(std::string path, const std::string& text);
    YamlFile(const YamlFile&) = delete;
    YamlFile& operator=(const YamlFile&) = delete;

    [[nodiscard]] YamlValue root() const { return {path_, root_, ""}; }
    [[nodiscard]] const std::string& path() const { return path_; }
    [[nodiscard]] const std::string& digest() const { return digest_; }  ///< of its bytes

    /// Requires `format: FAMILY-VERSION` at the top, as in "straymark-camera/1". A newer version,
    /// another kind of file and none at all each have a message of their own.
    void require_format(std::string_view family, int version) const;

private:
    std::string path_;
    std::string digest_;
    YamlNode root_;
};

/// The word of `words` that `typed` was probably meant to be; empty: none is near.
std::string_view nearest_word(std::string_view typed, const std::vector<std::string_view>& words);

}  // namespace straymark::io
