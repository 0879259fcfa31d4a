#include "io/product_file.h"

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <fmt/format.h>
#include <nlohmann/json.hpp>
#include <optional>
#include <set>
#include <span>
#include <string_view>
#include <utility>

#include "core/error.h"
#include "io/fits_scan.h"
#include "io/fits_table.h"
#include "io/fits_writer.h"

namespace straymark::io {
namespace {

constexpr std::string_view kFormatStem = "straymark-";
constexpr const char* kFormatPlace = "HDU 0 (primary), keyword FORMAT";
constexpr int kNewestVersion = 1;
constexpr std::int64_t kLargestFits = std::int64_t{1} << 32;
constexpr std::int64_t kLargestJson = std::int64_t{1} << 26;

/// Order and unit of the columns of crosstalk products (docs/crosstalk_product.md).
struct KnownColumn {
    std::string_view table, name, unit;
};
constexpr std::array<KnownColumn, 27> kKnownColumns = {{
    {"PAIRS", "victim", ""},      {"PAIRS", "source", ""},        {"PAIRS", "coefficient", ""},
    {"PAIRS", "error", ""},       {"PAIRS", "pixels", "pixel"},   {"PAIRS", "exposures", ""},
    {"PAIRS", "chi2", ""},        {"PAIRS", "significance", ""},  {"PAIRS", "status", ""},
    {"LAGS", "victim", ""},       {"LAGS", "source", ""},         {"LAGS", "lag", ""},
    {"LAGS", "coefficient", ""},  {"LAGS", "error", ""},          {"BENDS", "victim", ""},
    {"BENDS", "source", ""},      {"BENDS", "onset_adu", "adu"},  {"BENDS", "c1", ""},
    {"BENDS", "c2", "adu**(-1)"}, {"BENDS", "c3", "adu**(-2)"},   {"BENDS", "error", ""},
    {"BENDS", "clipped", ""},     {"BENDS", "clipped_error", ""}, {"PRIORS", "stratum", ""},
    {"PRIORS", "mean", ""},       {"PRIORS", "spread", ""},       {"INPUTS", "name", ""},
}};

/// "straymark-KIND/VERSION"; nothing where the text has another form.
std::optional<ProductFormat> parse_format(std::string_view text) {
    const std::size_t slash = text.find('/');
    if (!text.starts_with(kFormatStem) || slash == std::string_view::npos) {
        return std::nullopt;
    }
    ProductFormat format;
    format.kind = text.substr(kFormatStem.size(), slash - kFormatStem.size());
    const std::string_view digits = text.substr(slash + 1);
    const auto [end, error] =
        std::from_chars(digits.data(), digits.data() + digits.size(), format.version);
    const bool whole = error == std::errc() && end == digits.data() + digits.size();
    return whole && format.version > 0 && !format.kind.empty() ? std::optional(format)
                                                               : std::nullopt;
}

ProductFormat format_or_error(const std::string& path, const std::string& place,
                              const std::optional<std::string>& text) {
    const std::optional<ProductFormat> format = text ? parse_format(*text) : std::nullopt;
    if (!format) {
        throw InputError(
            {path, place, text ? fmt::format("'{}'", printable(*text)) : "no such entry",
             "'straymark-KIND/VERSION'", "only calibration products belong in this folder"});
    }
    return *format;
}

bool begins_as_fits(const InputFile& file) {
    constexpr std::string_view kStart = "SIMPLE  =";
    std::string start(kStart.size(), ' ');
    if (file.size() >= static_cast<std::int64_t>(start.size())) {
        file.read_at(0, std::as_writable_bytes(std::span(start)));
    }
    return start == kStart;
}

std::optional<std::string> json_format(const std::string& path) {
    const nlohmann::json json =
        nlohmann::json::parse(read_text(path, kLargestJson), nullptr, false);
    if (!json.is_object()) {
        return std::nullopt;
    }
    const auto found = json.find("format");
    return found != json.end() && found->is_string() ? std::optional(found->get<std::string>())
                                                     : std::nullopt;
}

std::optional<std::string> text_of(const FitsHeader& header, const char* keyword) {
    const std::optional<CardValue> value = header.find(keyword);
    return value ? std::optional(std::string(trimmed(value->text))) : std::nullopt;
}

double date_of(const FitsHeader& header, const std::string& path, const char* keyword,
               double otherwise) {
    const std::optional<CardValue> value = header.find(keyword);
    if (!value) {
        return otherwise;
    }
    const std::optional<double> number = value->number();
    if (!number) {
        throw InputError({path, fmt::format("HDU 0 (primary), keyword {}", keyword),
                          fmt::format("'{}'", printable(value->text)), "a Modified Julian Date",
                          ""});
    }
    return *number;
}

/// Who, for what and when, from the primary header.
Product described_product(const std::string& path, const FitsHeader& header) {
    const ProductFormat format = format_or_error(path, kFormatPlace, text_of(header, "FORMAT"));
    if (format.version > kNewestVersion) {
        throw InputError(
            {path, kFormatPlace,
             fmt::format("version {}: a product newer than the program", format.version),
             fmt::format("at most version {}", kNewestVersion),
             "use a newer straymark, or an older product"});
    }
    Product product;
    product.path = path;
    product.kind = format.kind;
    product.camera = text_of(header, "CAMERA").value_or("");
    product.mode = text_of(header, "MODE").value_or("");
    product.filter = text_of(header, "FILTER").value_or("");
    product.version = text_of(header, "VERSION").value_or("");
    product.valid_from.days = date_of(header, path, "MJDFROM", product.valid_from.days);
    product.valid_to.days = date_of(header, path, "MJDTO", product.valid_to.days);
    if (product.camera.empty()) {
        throw InputError({path, "HDU 0 (primary), keyword CAMERA", "no name",
                          "the name of the camera that was calibrated", ""});
    }
    if (product.valid_from.days >= product.valid_to.days) {
        throw InputError(
            {path, "HDU 0 (primary), keywords MJDFROM and MJDTO",
             fmt::format("from {} to {}", product.valid_from.days, product.valid_to.days),
             "a first date before the second", ""});
    }
    return product;
}

ProductTable product_table(const BinaryTable& table) {
    ProductTable out;
    out.rows = table.rows();
    for (const TableField& field : table.fields()) {
        if (field.scalar()) {
            out.columns.emplace(field.name, table.values(field));
        }
    }
    return out;
}

}  // namespace

ProductFormat product_format(const std::string& path) {
    const InputFile file(path);
    if (!begins_as_fits(file)) {
        return format_or_error(path, "entry 'format'", json_format(path));
    }
    const FitsStructure structure = scan_fits(file);
    return format_or_error(path, kFormatPlace,
                           text_of(read_header(file, structure.hdus.front()), "FORMAT"));
}

Product read_product(const std::string& path) {
    const InputFile file(path);
    if (file.size() > kLargestFits) {
        throw InputError({path, "", fmt::format("{} bytes", file.size()),
                          fmt::format("at most {}", kLargestFits), "this is no product"});
    }
    if (!begins_as_fits(file)) {
        const ProductFormat format = product_format(path);
        throw InputError({path, "entry 'format'",
                          fmt::format("a product of kind '{}'", format.kind),
                          "a kind that this version of the program uses", ""});
    }
    const std::vector<FitsHdu> units = sound_units(file);
    Product product = described_product(path, read_header(file, units.front()));
    for (const FitsHdu& hdu : units) {
        const std::optional<BinaryTable> table = BinaryTable::read(file, hdu);
        if (table &&
            !product.tables.emplace(upper_case(table->name()), product_table(*table)).second) {
            throw InputError({path, place_of(hdu), "a second table of this name", "one", ""});
        }
    }
    product.digest = file_digest(file);
    return product;
}

namespace {

/// The columns of a table, known ones first.
std::vector<TableColumn> ordered_columns(const std::string& name, const ProductTable& table) {
    const auto written = [](const ProductTable::Column& column) {
        return std::visit([](const auto& values) { return ColumnValues(values); }, column);
    };
    std::vector<TableColumn> columns;
    std::set<std::string_view> done;
    for (const KnownColumn& known : kKnownColumns) {
        const auto found = table.columns.find(std::string(known.name));
        if (known.table == name && found != table.columns.end()) {
            columns.push_back({found->first, std::string(known.unit), written(found->second)});
            done.insert(found->first);
        }
    }
    for (const auto& [column, values] : table.columns) {
        if (!done.contains(column)) {
            columns.push_back({column, "", written(values)});
        }
    }
    return columns;
}

}  // namespace

void write_product(const std::string& path, const Product& product) {
    if (product.kind.empty() || product.camera.empty()) {
        throw InputError({path, "", "a product without kind or camera", "both", ""});
    }
    HeaderCards primary;
    primary.add_text("FORMAT", fmt::format("{}{}/{}", kFormatStem, product.kind, kNewestVersion),
                     "what this file is");
    primary.add_text("CAMERA", product.camera);
    primary.add_text("MODE", product.mode, "read-out mode; empty: any");
    primary.add_text("FILTER", product.filter, "empty: any");
    primary.add_text("VERSION", product.version, "of this product");
    primary.add_real("MJDFROM", product.valid_from.days, "valid from, MJD UTC");
    primary.add_real("MJDTO", product.valid_to.days, "valid until just before, MJD UTC");
    std::vector<FitsUnit> tables;
    for (const auto& [name, table] : product.tables) {
        tables.push_back(table_unit(name, ordered_columns(name, table)));
    }
    write_fits(path, primary, tables);
}

}  // namespace straymark::io
