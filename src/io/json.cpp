#include "io/json.h"

#include <cmath>
#include <nlohmann/json.hpp>

namespace straymark::io {
namespace {

using Json = nlohmann::ordered_json;

Json convert(const Value& value) {
    struct Visitor {
        Json operator()(std::monostate) const { return nullptr; }
        Json operator()(bool b) const { return b; }
        Json operator()(std::int64_t i) const { return i; }
        Json operator()(double d) const { return std::isfinite(d) ? Json(d) : Json(nullptr); }
        Json operator()(const std::string& s) const { return s; }
        Json operator()(const Value::Array& array) const {
            Json out = Json::array();
            for (const Value& item : array) {
                out.push_back(convert(item));
            }
            return out;
        }
        Json operator()(const Value::Object& object) const {
            Json out = Json::object();
            for (const auto& [key, item] : object) {
                out[key] = convert(item);
            }
            return out;
        }
    };
    return std::visit(Visitor{}, value.data());
}

}  // namespace

std::string to_json(const Value& value, int indent) {
    return convert(value).dump(indent, ' ', false, Json::error_handler_t::replace);
}

}  // namespace straymark::io
