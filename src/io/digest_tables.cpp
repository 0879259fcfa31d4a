#include "io/digest_tables.h"

#include <array>
#include <fmt/format.h>
#include <map>
#include <string>
#include <string_view>
#include <tuple>
#include <utility>

#include "core/error.h"
#include "io/record_tables.h"

namespace straymark::io {

template <>
inline constexpr std::array kStoredNames<ExposureType> = {
    std::string_view("sky"), std::string_view("dark"), std::string_view("flat"),
    std::string_view("focus"), std::string_view("other")};
template <>
inline constexpr std::array kStoredNames<AmplifierState> = {
    std::string_view("ok"), std::string_view("dead"), std::string_view("missing"),
    std::string_view("unusable")};
template <>
inline constexpr std::array kStoredNames<PsfSource> = {
    std::string_view("none"), std::string_view("measured"), std::string_view("neighbours")};

namespace {

/// What of an exposure is told once.
const auto kExposureFields = std::tuple{RecordField{"id", [](auto& e) -> auto& {return e.header.id;
}  // namespace
}  // namespace straymark::io
, RecordField{"sequence", [](auto& e) -> auto& {return e.header.sequence;
}
}
, RecordField{"type", [](auto& e) -> auto& {return e.header.type;
}
}
, RecordField{"type_value", [](auto& e) -> auto& {return e.header.type_value;
}
}
, RecordField{"clear_mjd", [](auto& e) -> auto& {return e.header.clear.days;
}
}
, RecordField{"start_mjd", [](auto& e) -> auto& {return e.header.start.days;
}
}
, RecordField{"end_mjd", [](auto& e) -> auto& {return e.header.end.days;
}
}
, RecordField{"readout_end_mjd", [](auto& e) -> auto& {return e.header.readout_end.days;
}
}
, RecordField{"exposure_s", [](auto& e) -> auto& {return e.header.exposure_s;
}
}
, RecordField{"filter", [](auto& e) -> auto& {return e.header.filter;
}
}
, RecordField{"header_ra_deg", [](auto& e) -> auto& {return e.header.boresight.ra_deg;
}
}
, RecordField{"header_dec_deg", [](auto& e) -> auto& {return e.header.boresight.dec_deg;
}
}
, RecordField{"header_psi_deg", [](auto& e) -> auto& {return e.header.psi_deg;
}
}
, RecordField{"pier_flipped", [](auto& e) -> auto& {return e.header.pier_flipped;
}
}
, RecordField{"temperature", [](auto& e) -> auto& {return e.header.temperature;
}
}
, RecordField{"mode", [](auto& e) -> auto& {return e.header.mode;
}
}
, RecordField{"camera_digest", [](auto& e) -> auto& {return e.camera_digest;
}
}
, RecordField{"ra_deg", [](auto& e) -> auto& {return e.pointing.boresight.ra_deg;
}
}
, RecordField{"dec_deg", [](auto& e) -> auto& {return e.pointing.boresight.dec_deg;
}
}
, RecordField{"psi_deg", [](auto& e) -> auto& {return e.pointing.psi_deg;
}
}
, RecordField{"refined", [](auto& e) -> auto& {return e.pointing.refined;
}
}
, RecordField{"matched_stars", [](auto& e) -> auto& {return e.pointing.matched_stars;
}
}
, RecordField{"residual_px", [](auto& e) -> auto& {return e.pointing.residual_px;
}
}
, RecordField{"shift_arcsec", [](auto& e) -> auto& {return e.pointing.shift_arcsec;
}
}
, RecordField{"turn_deg", [](auto& e) -> auto& {return e.pointing.turn_deg;
}
}
, RecordField{"pointing_reason", [](auto& e) -> auto& {return e.pointing.reason;
}
}
, RecordField {
    "transparency", [](auto& e) -> auto& {
        return e.transparency;
    }
}
}
;

const auto kDetectorFields =
    std::tuple{RecordField{"present", &DetectorDigest::present},
               RecordField{"reason", &DetectorDigest::reason},
               RecordField{"raw_file", &DetectorDigest::raw_file},
               RecordField{"psf_source", [](auto& d) -> auto& {return d.psf.source;
}
}
, RecordField{"psf_radius", [](auto& d) -> auto& {return d.psf.radius;
}
}
, RecordField{"psf_fwhm_px", [](auto& d) -> auto& {return d.psf.fwhm_px;
}
}
, RecordField{"psf_area_px", [](auto& d) -> auto& {return d.psf.noise_equivalent_area_px;
}
}
, RecordField {
    "psf_stars", [](auto& d) -> auto& {
        return d.psf.stars;
    }
}
}
;

const auto kAmplifierFields = std::tuple{RecordField{"state", &AmplifierDigest::state},
                                         RecordField{"reason", &AmplifierDigest::reason},
                                         RecordField{"bias_adu", &AmplifierDigest::bias_adu},
                                         RecordField{"sky_adu", &AmplifierDigest::sky_adu},
                                         RecordField{"noise_adu", &AmplifierDigest::noise_adu},
                                         RecordField{"floor_adu", &AmplifierDigest::floor_adu}};

const auto kRunFields = std::tuple{
    RecordField{"row", &ReadoutRun::row}, RecordField{"tick", &ReadoutRun::tick},
    RecordField{"length", &ReadoutRun::length}, RecordField{"first", &ReadoutRun::first_value}};

const auto kSpanFields =
    std::tuple{RecordField{"row", &ReadoutSpan::row}, RecordField{"tick", &ReadoutSpan::tick},
               RecordField{"length", &ReadoutSpan::length}};

const auto kBleedFields =
    std::tuple{RecordField{"y", &PixelRun::y}, RecordField{"x", &PixelRun::x0},
               RecordField{"length", &PixelRun::length}};

const auto kStarFields =
    std::tuple{RecordField{"x_px", [](auto& s) -> auto& {return s.position.x_px;
}
}
, RecordField{"y_px", [](auto& s) -> auto& {return s.position.y_px;
}
}
, RecordField{"flux_e", &MeasuredStar::flux_e},
    RecordField{"flux_error_e", &MeasuredStar::flux_error_e}, RecordField {
    "position_error_px", &MeasuredStar::position_error_px
}
}
;

/// A number or a text by itself.
const auto kValueFields = std::tuple{RecordField{"value", std::identity{}}};

constexpr const char* kExposure = "EXPOSURE";
constexpr const char* kDetectors = "DETECTORS";
constexpr const char* kAmplifiers = "AMPLIFIERS";
constexpr const char* kAmplifierCount = "amplifiers";  // in DETECTORS

/// A list that each record of a kind has. The items of all records lie in one table, in order; a
/// column of the records' own table counts them.
template <typename Get, typename Fields>
struct ListOf {
    const char* table;
    const char* column;
    Get get;
    const Fields& fields;
};
template <typename Get, typename Fields>
ListOf(const char*, const char*, Get, const Fields&) -> ListOf<Get, Fields>;

const auto kExposureLists =
    std::tuple{ListOf{"NOTES", "notes", [](auto& e) -> auto& {return e.header.notes;
}
, kValueFields
}
, ListOf {
    "INPUTS", "inputs", [](auto& e) -> auto& {
        return e.input_digests;
    }
    , kValueFields
}
}
;
const auto kDetectorLists =
    std::tuple{ListOf{"PSF", "psf", [](auto& d) -> auto& {return d.psf.values;
}
, kValueFields
}
, ListOf{"BLEED", "bleed", [](auto& d) -> auto& {return d.bleed;
}
, kBleedFields
}
, ListOf{"STARS", "stars", [](auto& d) -> auto& {return d.stars;
}
, kStarFields
}
, ListOf {
    "WCS", "wcs", [](auto& d) -> auto& {
        return d.header_wcs;
    }
    , kValueFields
}
}
;
const auto kAmplifierLists = std::tuple{ListOf{"RUNS", "runs", [](auto& a) -> auto& {return a.runs;
}
, kRunFields
}
, ListOf{"VALUES", "values", [](auto& a) -> auto& {return a.values;
}
, kValueFields
}
, ListOf{"SATURATED", "saturated", [](auto& a) -> auto& {return a.saturated;
}
, kSpanFields
}
, ListOf {
    "INVALID", "invalid", [](auto& a) -> auto& {
        return a.invalid;
    }
    , kSpanFields
}
}
;

template <typename Record, typename Get>
TableColumn count_column(const char* name, const std::vector<const Record*>& records, Get get) {
    std::vector<std::int64_t> counts;
    counts.reserve(records.size());
    for (const Record* record : records) {
        counts.push_back(static_cast<std::int64_t>(get(*record).size()));
    }
    return {name, "", std::move(counts)};
}

/// Columns that count the items of each list.
template <typename Record, typename... Lists>
void append_counts(std::vector<TableColumn>& columns, const std::vector<const Record*>& records,
                   const std::tuple<Lists...>& lists) {
    std::apply(
        [&](const auto&... list) {
            (columns.push_back(count_column(list.column, records, list.get)), ...);
        },
        lists);
}

/// A table for each list, the items of all records one after another.
template <typename Record, typename... Lists>
void append_items(std::vector<FitsUnit>& units, const std::vector<const Record*>& records,
                  const std::tuple<Lists...>& lists) {
    const auto append = [&](const auto& list) {
        std::remove_cvref_t<decltype(list.get(*records.front()))> items;
        for (const Record* record : records) {
            const auto& some = list.get(*record);
            items.insert(items.end(), some.begin(), some.end());
        }
        units.push_back(table_unit(list.table, columns_from(items, list.fields)));
    };
    std::apply([&append](const auto&... list) { (append(list), ...); }, lists);
}

template <typename Record>
std::vector<const Record*> pointers_to(const std::vector<Record>& records) {
    std::vector<const Record*> pointers;
    pointers.reserve(records.size());
    for (const Record& record : records) {
        pointers.push_back(&record);
    }
    return pointers;
}

/// The tables of a digest by name.
class Tables {
public:
    Tables(const InputFile& file, std::span<const FitsHdu> units) : path_(file.path()) {
        for (const FitsHdu& unit : units) {
            if (std::optional<BinaryTable> table = BinaryTable::read(file, unit)) {
                std::string name = table->name();
                tables_.emplace(std::move(name), std::move(*table));
            }
        }
    }
    [[nodiscard]] const BinaryTable& operator[](const char* name) const {
        const auto found = tables_.find(name);
        if (found == tables_.end()) {
            throw InputError({path_, "", fmt::format("no table {}", name), "all tables of a digest",
                              "build from the raw files again"});
        }
        return found->second;
    }

private:
    std::string path_;
    std::map<std::string, BinaryTable> tables_;
};

/// Deals the items of all records out to each of them, by their counts.
template <typename Record, typename Items, typename Get>
void deal_out(const BinaryTable& parent, const std::vector<std::int64_t>& counts,
              std::vector<Record>& records, Items items, Get get) {
    auto next = items.begin();
    for (std::size_t i = 0; i < records.size(); ++i) {
        if (counts[i] < 0 || counts[i] > items.end() - next) {
            parent.refuse(fmt::format("row {}", i + 1), fmt::format("a list of {}", counts[i]),
                          fmt::format("at most {}, which are left", items.end() - next));
        }
        get(records[i])
            .assign(std::make_move_iterator(next), std::make_move_iterator(next + counts[i]));
        next += counts[i];
    }
    if (next != items.end()) {
        parent.refuse("its counts", fmt::format("{} items more than counted", items.end() - next),
                      "a record for each");
    }
}

template <typename Record, typename List>
void deal(const Tables& tables, const BinaryTable& parent, std::vector<Record>& records,
          const List& list) {
    using Items = std::remove_cvref_t<decltype(list.get(records.front()))>;
    deal_out(parent, parent.stored<std::int64_t>(list.column), records,
             records_from<typename Items::value_type>(tables[list.table], list.fields), list.get);
}

template <typename Record, typename... Lists>
void deal_all(const Tables& tables, const BinaryTable& parent, std::vector<Record>& records,
              const std::tuple<Lists...>& lists) {
    std::apply([&](const auto&... list) { (deal(tables, parent, records, list), ...); }, lists);
}

/// What predictors take for granted of the places in an amplifier's lists.
void check_runs(const BinaryTable& table, const AmplifierDigest& amplifier) {
    for (const ReadoutRun& run : amplifier.runs) {
        if (run.length < 0 || run.first_value > amplifier.values.size() ||
            static_cast<std::size_t>(run.length) > amplifier.values.size() - run.first_value) {
            table.refuse("a run",
                         fmt::format("values {} to {}", run.first_value,
                                     std::int64_t{run.first_value} + run.length),
                         fmt::format("values within the {} there are", amplifier.values.size()));
        }
    }
}

void check_psf(const BinaryTable& table, const Psf& psf) {
    const std::int64_t side = 2 * std::int64_t{psf.radius} + 1;
    const auto count = static_cast<std::int64_t>(psf.values.size());
    if (psf.radius < 0 || (count != 0 && count != side * side)) {
        table.refuse("a PSF", fmt::format("{} values", count),
                     fmt::format("{}, as its radius {} tells", side * side, psf.radius));
    }
}

}  // namespace

std::vector<FitsUnit> digest_units(const ExposureDigest& digest) {
    const std::vector<const ExposureDigest*> exposures = {&digest};
    const std::vector<const DetectorDigest*> detectors = pointers_to(digest.detectors);
    std::vector<const AmplifierDigest*> amplifiers;
    for (const DetectorDigest* detector : detectors) {
        const auto some = pointers_to(detector->amplifiers);
        amplifiers.insert(amplifiers.end(), some.begin(), some.end());
    }
    std::vector<FitsUnit> units;
    std::vector<TableColumn> columns = columns_from(exposures, kExposureFields);
    append_counts(columns, exposures, kExposureLists);
    units.push_back(table_unit(kExposure, columns));
    append_items(units, exposures, kExposureLists);

    columns = columns_from(detectors, kDetectorFields);
    columns.push_back(count_column(
        kAmplifierCount, detectors, [](const DetectorDigest& d) -> auto& { return d.amplifiers; }));
    append_counts(columns, detectors, kDetectorLists);
    units.push_back(table_unit(kDetectors, columns));
    append_items(units, detectors, kDetectorLists);

    columns = columns_from(amplifiers, kAmplifierFields);
    append_counts(columns, amplifiers, kAmplifierLists);
    units.push_back(table_unit(kAmplifiers, columns));
    append_items(units, amplifiers, kAmplifierLists);
    return units;
}

ExposureDigest digest_from(const InputFile& file, std::span<const FitsHdu> units) {
    const Tables tables(file, units);
    const BinaryTable& exposure_table = tables[kExposure];
    auto exposures = records_from<ExposureDigest>(exposure_table, kExposureFields);
    if (exposures.size() != 1) {
        exposure_table.refuse("keyword NAXIS2", fmt::format("{} rows", exposures.size()), "1");
    }
    deal_all(tables, exposure_table, exposures, kExposureLists);
    ExposureDigest digest = std::move(exposures.front());

    const BinaryTable& detector_table = tables[kDetectors];
    digest.detectors = records_from<DetectorDigest>(detector_table, kDetectorFields);
    deal_all(tables, detector_table, digest.detectors, kDetectorLists);
    for (const DetectorDigest& detector : digest.detectors) {
        check_psf(detector_table, detector.psf);
    }

    const BinaryTable& amplifier_table = tables[kAmplifiers];
    auto amplifiers = records_from<AmplifierDigest>(amplifier_table, kAmplifierFields);
    deal_all(tables, amplifier_table, amplifiers, kAmplifierLists);
    for (const AmplifierDigest& amplifier : amplifiers) {
        check_runs(amplifier_table, amplifier);
    }
    deal_out(
        detector_table, detector_table.stored<std::int64_t>(kAmplifierCount), digest.detectors,
        std::move(amplifiers), [](DetectorDigest & d) -> auto& { return d.amplifiers; });
    return digest;
}

}  // namespace straymark::io
