#pragma once

#include <charconv>
#include <cstdint>
#include <fmt/format.h>
#include <functional>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <tuple>
#include <type_traits>
#include <utility>
#include <vector>

#include "io/fits_table.h"
#include "io/fits_writer.h"

/// Structs as rows of FITS tables, and back, exactly: reals bit for bit, any text. What a struct is
/// made of is said once, as a tuple of fields, which both ways follow.

namespace straymark::io {

/// One member: the name of its column, and what gives a reference to it (also of a const record):
/// a pointer to member or a generic lambda.
template <typename Get>
struct RecordField {
    const char* name;
    Get get;
};
template <typename Get>
RecordField(const char*, Get) -> RecordField<Get>;

/// The names under which the values of an enumeration are stored, in order: specialise.
template <typename Enum>
inline constexpr std::span<const std::string_view> kStoredNames{};

/// How a member of type T is stored in a column of `Type`. `unpack` gives nothing where the stored
/// value stands for none.
template <typename T>
struct Storage {
    using Type = T;
    static T pack(T value) { return value; }
    static std::optional<T> unpack(T value) { return value; }
};
template <>
struct Storage<bool> {
    using Type = std::int16_t;
    static Type pack(bool value) { return value ? 1 : 0; }
    static std::optional<bool> unpack(Type value) {
        return value == 0 || value == 1 ? std::optional(value == 1) : std::nullopt;
    }
};
template <>
struct Storage<std::uint32_t> {
    using Type = std::int64_t;
    static Type pack(std::uint32_t value) { return value; }
    static std::optional<std::uint32_t> unpack(Type value) {
        return std::in_range<std::uint32_t>(value)
                   ? std::optional(static_cast<std::uint32_t>(value))
                   : std::nullopt;
    }
};
template <>
struct Storage<std::string> {
    using Type = std::string;
    static Type pack(const std::string& value) { return escaped_text(value); }
    static std::optional<std::string> unpack(const Type& value) { return restored_text(value); }
};
/// Empty: no text; otherwise a colon and the text.
template <>
struct Storage<std::optional<std::string>> {
    using Type = std::string;
    static Type pack(const std::optional<std::string>& value) {
        return value ? fmt::format(":{}", escaped_text(*value)) : "";
    }
    static std::optional<std::optional<std::string>> unpack(const Type& value) {
        if (value.empty()) {
            return std::optional<std::string>();
        }
        return value.front() == ':' ? std::optional(std::optional(restored_text(value.substr(1))))
                                    : std::nullopt;
    }
};
/// Empty: no number; otherwise the shortest decimal that reads back as the same number.
template <>
struct Storage<std::optional<double>> {
    using Type = std::string;
    static Type pack(const std::optional<double>& value) {
        return value ? fmt::format("{}", *value) : "";
    }
    static std::optional<std::optional<double>> unpack(const Type& value) {
        if (value.empty()) {
            return std::optional<double>();
        }
        double number = 0.0;
        const char* const last = value.data() + value.size();
        const auto [end, error] = std::from_chars(value.data(), last, number);
        return error == std::errc() && end == last ? std::optional(std::optional(number))
                                                   : std::nullopt;
    }
};
template <typename Enum>
requires std::is_enum_v<Enum>
struct Storage<Enum> {
    using Type = std::string;
    static Type pack(Enum value) {
        return std::string(kStoredNames<Enum>[static_cast<std::size_t>(value)]);
    }
    static std::optional<Enum> unpack(const Type& value) {
        for (std::size_t i = 0; i < kStoredNames<Enum>.size(); ++i) {
            if (kStoredNames<Enum>[i] == value) {
                return static_cast<Enum>(i);
            }
        }
        return std::nullopt;
    }
};

namespace detail {

template <typename T>
std::vector<T> stored_cells(const BinaryTable& table, const char* column) {
    if constexpr (std::is_same_v<T, std::string>) {
        return table.strings(column);
    } else {
        return table.stored<T>(column);
    }
}

template <typename Record>
const Record& record_of(const Record& record) {
    return record;
}
template <typename Record>
const Record& record_of(const Record* record) {
    return *record;
}

}  // namespace detail

/// Columns that hold the fields of `records`: a range of records, or of pointers to them.
template <typename Records, typename... Gets>
std::vector<TableColumn> columns_from(const Records& records,
                                      const std::tuple<RecordField<Gets>...>& fields) {
    const auto column = [&records](const auto& field) -> TableColumn {
        using Member = std::remove_cvref_t<decltype(std::invoke(
            field.get, detail::record_of(*std::begin(records))))>;
        std::vector<typename Storage<Member>::Type> cells;
        cells.reserve(std::size(records));
        for (const auto& record : records) {
            cells.push_back(
                Storage<Member>::pack(std::invoke(field.get, detail::record_of(record))));
        }
        return {field.name, "", std::move(cells)};
    };
    return std::apply([&column](const auto&... field) { return std::vector{column(field)...}; },
                      fields);
}

/// The records of a table that `columns_from` filled. Throws InputError where a column is missing,
/// of another type, or holds what its member cannot.
template <typename Record, typename... Gets>
std::vector<Record> records_from(const BinaryTable& table,
                                 const std::tuple<RecordField<Gets>...>& fields) {
    std::vector<Record> records(table.rows());
    const auto fill = [&](const auto& field) {
        using Member = std::remove_cvref_t<decltype(std::invoke(field.get, records.front()))>;
        const auto cells = detail::stored_cells<typename Storage<Member>::Type>(table, field.name);
        for (std::size_t row = 0; row < records.size(); ++row) {
            std::optional<Member> value = Storage<Member>::unpack(cells[row]);
            if (!value) {
                table.refuse(fmt::format("column '{}', row {}", field.name, row + 1),
                             "a value that this column cannot have", "what was written");
            }
            std::invoke(field.get, records[row]) = std::move(*value);
        }
    };
    std::apply([&fill](const auto&... field) { (fill(field), ...); }, fields);
    return records;
}

}  // namespace straymark::io
