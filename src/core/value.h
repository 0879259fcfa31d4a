#pragma once

#include <cstdint>
#include <string>
#include <utility>
#include <variant>
#include <vector>

namespace straymark {

/// An ordered tree of plain values: what a command reports as JSON. Keys keep their order.
class Value {
public:
    using Array = std::vector<Value>;
    using Object = std::vector<std::pair<std::string, Value>>;

    Value() = default;
    Value(bool b) : data_(b) {}                            // NOLINT(google-explicit-constructor)
    Value(int i) : data_(static_cast<std::int64_t>(i)) {}  // NOLINT(google-explicit-constructor)
    Value(std::int64_t i) : data_(i) {}                    // NOLINT(google-explicit-constructor)
    Value(std::size_t i)
        : data_(static_cast<std::int64_t>(i)) {}     // NOLINT(google-explicit-constructor)
    Value(double d) : data_(d) {}                    // NOLINT(google-explicit-constructor)
    Value(const char* s) : data_(std::string(s)) {}  // NOLINT(google-explicit-constructor)
    Value(std::string s) : data_(std::move(s)) {}    // NOLINT(google-explicit-constructor)
    Value(Array a) : data_(std::move(a)) {}          // NOLINT(google-explicit-constructor)
    Value(Object o) : data_(std::move(o)) {}         // NOLINT(google-explicit-constructor)

    using Data =
        std::variant<std::monostate, bool, std::int64_t, double, std::string, Array, Object>;
    [[nodiscard]] const Data& data() const { return data_; }

private:
    Data data_;
};

}  // namespace straymark
