#include "io/yaml_tree.h"

#include <algorithm>
#include <fmt/format.h>
#include <sstream>
#include <yaml-cpp/eventhandler.h>
#include <yaml-cpp/yaml.h>

#include "core/error.h"

namespace straymark::io {
namespace {

constexpr std::size_t kDeepest = 32;
constexpr std::size_t kMostValues = 200000;
constexpr std::size_t kMostKeys = 10000;  // of one mapping: each is compared with those before

[[noreturn]] void refuse(const std::string& path, const YAML::Mark& mark, const std::string& found,
                         const std::string& expected, const std::string& advice = "") {
    const std::string place =
        mark.is_null() ? "" : fmt::format("line {}, column {}", mark.line + 1, mark.column + 1);
    throw InputError({path, place, found, expected, advice});
}

/// Builds our tree from the parser's events. yaml-cpp's own nodes are not used: they accept
/// duplicate keys and expand aliases.
class TreeBuilder : public YAML::EventHandler {
public:
    explicit TreeBuilder(const std::string& path) : path_(path) {}

    [[nodiscard]] YamlNode take() { return std::move(root_); }

    void OnDocumentStart(const YAML::Mark&) override {}
    void OnDocumentEnd() override {}
    void OnNull(const YAML::Mark& mark, YAML::anchor_t) override {
        add(node(mark, YamlNode::Kind::null, ""), mark);
    }
    void OnAlias(const YAML::Mark& mark, YAML::anchor_t) override {
        refuse(path_, mark, "an alias (*)", "values written out",
               "repeat the value; aliases are not supported");
    }
    void OnAnchor(const YAML::Mark& mark, const std::string& name) override {
        refuse(path_, mark, fmt::format("an anchor (&{:.32})", name), "values written out",
               "a text that begins with & needs quotes");
    }
    void OnScalar(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t,
                  const std::string& value) override {
        YamlNode scalar = node(mark, YamlNode::Kind::scalar, tag);
        scalar.quoted = tag == "!";
        scalar.text = value;
        add(std::move(scalar), mark);
    }
    void OnSequenceStart(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t,
                         YAML::EmitterStyle::value) override {
        open(node(mark, YamlNode::Kind::sequence, tag), mark);
    }
    void OnSequenceEnd() override { close(); }
    void OnMapStart(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t,
                    YAML::EmitterStyle::value) override {
        open(node(mark, YamlNode::Kind::mapping, tag), mark);
    }
    void OnMapEnd() override { close(); }

private:
    [[nodiscard]] YamlNode node(const YAML::Mark& mark, YamlNode::Kind kind,
                                const std::string& tag) {
        if (!tag.empty() && tag != "?" && tag != "!") {
            refuse(path_, mark, fmt::format("a tag ({:.32})", tag), "plain values",
                   "a text that begins with ! needs quotes");
        }
        if (++values_ > kMostValues) {
            refuse(path_, mark, fmt::format("over {} values", kMostValues), "a smaller file");
        }
        YamlNode made;
        made.kind = kind;
        made.line = mark.line + 1;
        made.column = mark.column + 1;
        return made;
    }

    [[nodiscard]] bool awaits_key() const {
        return !open_.empty() && open_.back().kind == YamlNode::Kind::mapping &&
               open_.back().keys.size() == open_.back().children.size();
    }

    void open(YamlNode container, const YAML::Mark& mark) {
        if (awaits_key()) {
            refuse(path_, mark, "a list or mapping as a key", "a text as the key");
        }
        if (open_.size() >= kDeepest) {
            refuse(path_, mark, fmt::format("values nested deeper than {}", kDeepest),
                   "a shallower file");
        }
        open_.push_back(std::move(container));
    }

    void close() {
        YamlNode container = std::move(open_.back());
        open_.pop_back();
        attach(std::move(container));
    }

    void add(YamlNode value, const YAML::Mark& mark) {
        if (!awaits_key()) {
            attach(std::move(value));
            return;
        }
        std::vector<YamlKey>& keys = open_.back().keys;
        if (value.kind == YamlNode::Kind::null) {
            refuse(path_, mark, "an empty key", "a text as the key");
        }
        const auto first = std::find_if(keys.begin(), keys.end(), [&value](const YamlKey& key) {
            return key.text == value.text;
        });
        if (first != keys.end()) {
            refuse(path_, mark, fmt::format("key '{:.64}' a second time", value.text),
                   fmt::format("each key once (the first is at line {})", first->line),
                   "delete one of the two");
        }
        if (keys.size() == kMostKeys) {
            refuse(path_, mark, fmt::format("over {} keys in one mapping", kMostKeys),
                   "a smaller mapping");
        }
        keys.push_back({std::move(value.text), value.line, value.column});
    }

    void attach(YamlNode value) {
        if (open_.empty()) {
            root_ = std::move(value);
        } else {
            open_.back().children.push_back(std::move(value));
        }
    }

    const std::string& path_;
    std::vector<YamlNode> open_;  ///< containers not closed yet, outermost first
    YamlNode root_;
    std::size_t values_ = 0;
};

}  // namespace

YamlNode parse_yaml(const std::string& path, const std::string& text) {
    try {
        std::istringstream stream(text);
        YAML::Parser parser(stream);
        TreeBuilder builder(path);
        if (!parser.HandleNextDocument(builder)) {
            throw InputError({path, "", "an empty file", "a YAML mapping", ""});
        }
        YamlNode root = builder.take();
        TreeBuilder more(path);
        if (parser.HandleNextDocument(more)) {
            throw InputError({path, "", "more than one YAML document", "one document",
                              "delete the line '---' that begins the second"});
        }
        return root;
    } catch (const YAML::Exception& error) {
        refuse(path, error.mark, error.msg, "YAML");
    }
}

}  // namespace straymark::io
