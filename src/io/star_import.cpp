#include "io/star_import.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <fmt/format.h>
#include <limits>
#include <optional>
#include <string_view>
#include <utility>

#include "core/error.h"
#include "io/fits_cards.h"
#include "io/star_csv.h"
#include "io/star_fits.h"
#include "io/star_layout.h"
#include "io/star_votable.h"

namespace straymark::io {
namespace {

/// What a column of stars may hold.
struct Quantity {
    std::string_view name;
    double least, most;
    std::array<std::string_view, 8> units;  ///< accepted spellings, blanks left out
};
constexpr Quantity kRa{"ra", 0.0, 360.0, {"deg", "degree", "degrees"}};
constexpr Quantity kDec{"dec", -90.0, 90.0, {"deg", "degree", "degrees"}};
constexpr Quantity kEpoch{"epoch", 1800.0, 2200.0, {"yr", "a", "year", "years", "Jyear", "jyear"}};
/// The fastest star moves 10,400 mas a year.
constexpr std::array<std::string_view, 8> kMotionUnits{
    "mas/yr", "mas.yr-1", "masyr-1", "mas/year", "mas.yr**-1", "masyr**-1", "mas/a", "mas.a-1"};
constexpr Quantity kPmRa{"pmra", -15000.0, 15000.0, kMotionUnits};
constexpr Quantity kPmDec{"pmdec", -15000.0, 15000.0, kMotionUnits};
constexpr Quantity kMag{"mag", -30.0, 40.0, {"mag"}};

std::unique_ptr<StarRows> open_rows(const std::string& path) {
    const InputFile file(path);
    std::string start(static_cast<std::size_t>(std::min<std::int64_t>(file.size(), 1024)), '\0');
    file.read_at(0, std::as_writable_bytes(std::span(start)));
    constexpr std::string_view kGzip = "\x1f\x8b";
    if (start.starts_with(kGzip)) {
        throw InputError({path, "", "a compressed file", "a FITS table, a VOTable or CSV",
                          "decompress it first"});
    }
    if (start.starts_with("SIMPLE  =")) {
        return read_star_fits(path);
    }
    if (start.find("<VOTABLE") != std::string::npos || start.find("<?xml") != std::string::npos) {
        return read_star_votable(path);
    }
    return read_star_csv(path);
}

/// The columns of a table that matter to us, and one row of them at a time.
class StarParser {
public:
    StarParser(const std::string& path, StarRows& rows, const StarImportSettings& settings)
        : path_(path), rows_(rows), settings_(settings) {
        for (const auto& [name, given] : settings.columns) {
            check_known(name);
        }
        id_ = required("id");
        ra_ = required(kRa);
        dec_ = required(kDec);
        epoch_ = optional(kEpoch);
        pm_ra_ = optional(kPmRa);
        pm_dec_ = optional(kPmDec);
        find_magnitudes();
    }

    [[nodiscard]] const std::vector<std::string>& mag_columns() const { return mag_names_; }

    /// The current row.
    void parse(StarRecord& star) const {
        star.id = rows_.text(id_);
        const bool printable_id = std::all_of(star.id.begin(), star.id.end(),
                                              [](char c) { return c >= ' ' && c <= '~'; });
        if (star.id.empty() || star.id.size() > kLongestStarId || !printable_id ||
            star.id.back() == ' ') {
            refuse("id", fmt::format("'{}'", printable(star.id)),
                   fmt::format("1 to {} printable ASCII characters", kLongestStarId));
        }
        star.position = {in_range(kRa, ra_), in_range(kDec, dec_)};
        if (star.position.ra_deg == 360.0) {
            star.position.ra_deg = 0.0;
        }
        star.epoch = static_cast<float>(epoch_ ? in_range(kEpoch, *epoch_) : kDefaultStarEpoch);
        // Many lists leave the motion empty where it was not measured.
        star.pm_ra_mas_yr = static_cast<float>(or_zero(in_range_or_null(kPmRa, pm_ra_)));
        star.pm_dec_mas_yr = static_cast<float>(or_zero(in_range_or_null(kPmDec, pm_dec_)));
        for (std::size_t i = 0; i < mags_.size(); ++i) {
            star.mags[i] = static_cast<float>(in_range_or_null(kMag, mags_[i]));
        }
    }

private:
    static double or_zero(double value) { return std::isnan(value) ? 0.0 : value; }

    void check_known(const std::string& name) const {
        constexpr std::array<std::string_view, 7> kNames{"id",   "ra",    "dec", "epoch",
                                                         "pmra", "pmdec", "mag"};
        if (!name.starts_with("mag_") &&
            std::find(kNames.begin(), kNames.end(), name) == kNames.end()) {
            throw UsageError(fmt::format("--column {}: expected one of {}, mag_FILTER", name,
                                         fmt::join(kNames, ", ")));
        }
    }

    /// By exact name, else by name in any letter case where only one fits.
    [[nodiscard]] std::optional<int> find(std::string_view wanted) const {
        std::optional<int> found;
        int fitting = 0;
        for (std::size_t i = 0; i < rows_.columns().size(); ++i) {
            const std::string& name = rows_.columns()[i].name;
            if (name == wanted) {
                return static_cast<int>(i);
            }
            if (upper_case(name) == upper_case(wanted)) {
                found = static_cast<int>(i);
                ++fitting;
            }
        }
        return fitting == 1 ? found : std::nullopt;
    }
    [[nodiscard]] std::string name_in_table(std::string_view ours) const {
        const auto given = settings_.columns.find(std::string(ours));
        return given == settings_.columns.end() ? std::string(ours) : given->second;
    }

    [[nodiscard]] int required(std::string_view name) const {
        const std::string wanted = name_in_table(name);
        if (const auto column = find(wanted)) {
            return *column;
        }
        std::vector<std::string> names;
        for (const StarRows::Column& column : rows_.columns()) {
            names.push_back(printable(column.name));
        }
        throw InputError({path_, "columns", fmt::format("{}", fmt::join(names, ", ")),
                          fmt::format("a column '{}'", printable(wanted)),
                          fmt::format("name it with --column {}=NAME", name)});
    }
    [[nodiscard]] int required(const Quantity& quantity) const {
        const int column = required(quantity.name);
        check_unit(quantity, column);
        return column;
    }
    [[nodiscard]] std::optional<int> optional(const Quantity& quantity) const {
        const bool asked_for = settings_.columns.contains(std::string(quantity.name));
        if (!asked_for && !find(quantity.name)) {
            return std::nullopt;
        }
        return required(quantity);
    }

    void check_unit(const Quantity& quantity, int column) const {
        std::string unit = rows_.columns()[static_cast<std::size_t>(column)].unit;
        std::erase_if(unit, [](char c) { return c == ' ' || c == '\'' || c == '"'; });
        const auto& units = quantity.units;
        if (!unit.empty() && std::find(units.begin(), units.end(), unit) == units.end()) {
            throw InputError({path_,
                              fmt::format("column '{}'", printable(name_in_table(quantity.name))),
                              fmt::format("unit '{}'", printable(unit)),
                              fmt::format("{}, or no unit (taken as that)", units.front()),
                              "convert the column"});
        }
    }

    void find_magnitudes() {
        std::vector<std::string> names;
        for (const StarRows::Column& column : rows_.columns()) {
            if (column.name == "mag" || column.name.starts_with("mag_")) {
                names.push_back(column.name);
            }
        }
        for (const auto& [name, given] : settings_.columns) {
            if (name.starts_with("mag")) {
                names.push_back(name);
            }
        }
        std::sort(names.begin(), names.end());
        names.erase(std::unique(names.begin(), names.end()), names.end());
        for (const std::string& name : names) {
            mags_.push_back(required(name));
            check_unit(kMag, mags_.back());
        }
        mag_names_ = std::move(names);
        if (mags_.empty()) {
            mags_.push_back(required("mag"));
        }
        if (mags_.size() > kMostMagColumns) {
            throw InputError({path_, "columns", fmt::format("{} magnitudes", mags_.size()),
                              fmt::format("at most {}", kMostMagColumns), ""});
        }
    }

    [[nodiscard]] double in_range_or_null(const Quantity& quantity,
                                          std::optional<int> column) const {
        const double value =
            column ? rows_.number(*column) : std::numeric_limits<double>::quiet_NaN();
        if (!std::isnan(value) && !(value >= quantity.least && value <= quantity.most)) {
            refuse(
                quantity.name, fmt::format("{}", value),
                fmt::format("{} to {} {}", quantity.least, quantity.most, quantity.units.front()));
        }
        return value + 0.0;  // one zero, whatever sign the table's format kept
    }
    [[nodiscard]] double in_range(const Quantity& quantity, int column) const {
        const double value = in_range_or_null(quantity, column);
        if (std::isnan(value)) {
            refuse(
                quantity.name, "no value",
                fmt::format("{} to {} {}", quantity.least, quantity.most, quantity.units.front()));
        }
        return value;
    }

    [[noreturn]] void refuse(std::string_view name, std::string found, std::string expected) const {
        throw InputError({path_, fmt::format("{}, column '{}'", rows_.place(), name_in_table(name)),
                          std::move(found), std::move(expected), "correct or remove that row"});
    }

    const std::string& path_;
    StarRows& rows_;
    const StarImportSettings& settings_;
    int id_ = 0, ra_ = 0, dec_ = 0;
    std::optional<int> epoch_, pm_ra_, pm_dec_;
    std::vector<int> mags_;
    std::vector<std::string> mag_names_;
};

}  // namespace

StarImportReport import_star_list(const std::string& from, const std::string& to,
                                  const StarImportSettings& settings,
                                  const std::function<void(std::int64_t)>& progress) {
    const std::unique_ptr<StarRows> rows = open_rows(from);
    const StarParser parser(from, *rows, settings);
    const SkyCells cells(kStarCellSize_deg);
    const std::size_t mags = parser.mag_columns().size();
    StarSorter sorter(cells, to, mags, settings.batch_bytes);
    StarRecord star;
    star.mags.resize(mags);
    while (rows->next()) {
        parser.parse(star);
        sorter.add(star);
        constexpr std::int64_t kOften = 1 << 16;
        if (progress && sorter.count() % kOften == 0) {
            progress(sorter.count());
        }
    }
    if (sorter.count() == 0) {
        throw InputError({from, "", "no stars", "at least one row", "give a list with stars"});
    }
    StarImportReport report{sorter.count(), parser.mag_columns(), {}};
    report.coverage = write_star_list(to, cells, sorter, parser.mag_columns(), settings.covers);
    return report;
}

}  // namespace straymark::io
