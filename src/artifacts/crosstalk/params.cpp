#include "artifacts/crosstalk/params.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <fmt/format.h>
#include <map>
#include <set>

#include "core/error.h"

namespace straymark::crosstalk {
namespace {

/// Typed access to one table of a product, with errors that name table, row and column.
class TableView {
public:
    TableView(const Product& product, const std::string& name)
        : path_(product.path), name_(name), table_(product.tables.at(name)) {}

    [[nodiscard]] std::size_t rows() const { return table_.rows; }
    [[nodiscard]] bool has(const std::string& column) const {
        return table_.columns.contains(column);
    }
    [[nodiscard]] const std::string& text(const std::string& column, std::size_t row) const {
        const auto* values = std::get_if<std::vector<std::string>>(&find(column));
        if (values == nullptr) {
            throw InputError({path_, where(column), "numbers", "text", ""});
        }
        return (*values)[row];
    }
    /// Within +-limit; NaN only where `nan_allowed`.
    [[nodiscard]] double number(const std::string& column, std::size_t row, double limit,
                                bool nan_allowed = false) const {
        const double value = std::visit(
            [&](const auto& values) -> double {
                using T = typename std::decay_t<decltype(values)>::value_type;
                if constexpr (std::is_same_v<T, std::string>) {
                    throw InputError({path_, where(column), "text", "numbers", ""});
                } else {
                    return static_cast<double>(values[row]);
                }
            },
            find(column));
        if (std::isnan(value) && nan_allowed) {
            return value;
        }
        if (!std::isfinite(value) || std::abs(value) > limit) {
            refuse(column, row, fmt::format("{}", value),
                   fmt::format("a finite number within +-{}", limit));
        }
        return value;
    }
    [[noreturn]] void refuse(const std::string& column, std::size_t row, const std::string& found,
                             const std::string& expected) const {
        throw InputError({path_, fmt::format("{}, row {}", where(column), row + 1), found, expected,
                          "correct the product or fit it again"});
    }

private:
    [[nodiscard]] std::string where(const std::string& column) const {
        return fmt::format("table {}, column '{}'", name_, column);
    }
    [[nodiscard]] const ProductTable::Column& find(const std::string& column) const {
        const auto found = table_.columns.find(column);
        if (found == table_.columns.end()) {
            std::string names;
            for (const auto& [name, values] : table_.columns) {
                names += (names.empty() ? "" : ", ") + name;
            }
            throw InputError({path_, "table " + name_, "columns " + names,
                              "a column '" + column + "'", "this product is not complete"});
        }
        return found->second;
    }

    std::string path_;
    std::string name_;
    const ProductTable& table_;
};

constexpr double kLargestCoefficient = 1.0;  // an echo as strong as its source is no echo

/// Amplifier names to flat indices, looked up once a row.
class PairNames {
public:
    PairNames(const Camera& camera, const Params& params) {
        for (int d = 0; d < static_cast<int>(camera.detectors.size()); ++d) {
            const auto& amplifiers = camera.detectors[static_cast<std::size_t>(d)].amplifiers;
            for (int a = 0; a < static_cast<int>(amplifiers.size()); ++a) {
                flat_.emplace(camera.amplifier_name({d, a}), params.flat({d, a}));
            }
        }
    }
    [[nodiscard]] int find(const TableView& table, const std::string& column,
                           std::size_t row) const {
        const std::string& name = table.text(column, row);
        const auto found = flat_.find(name);
        if (found == flat_.end()) {
            table.refuse(column, row, "'" + name + "'", "an amplifier of this camera");
        }
        return found->second;
    }

private:
    std::map<std::string, int> flat_;
};

PairStatus status_of(const TableView& table, std::size_t row) {
    static const std::map<std::string, PairStatus> kNames = {
        {"detected", PairStatus::detected},
        {"zero", PairStatus::zero},
        {"unmeasured", PairStatus::unmeasured},
        {"unresolved", PairStatus::unresolved}};
    const std::string& name = table.text("status", row);
    const auto found = kNames.find(name);
    if (found == kNames.end()) {
        table.refuse("status", row, "'" + name + "'", "detected, zero, unmeasured or unresolved");
    }
    return found->second;
}

std::array<std::optional<Prior>, 3> priors_of(const Product& product) {
    std::array<std::optional<Prior>, 3> priors;
    if (!product.tables.contains("PRIORS")) {
        return priors;
    }
    const TableView table(product, "PRIORS");
    for (std::size_t row = 0; row < table.rows(); ++row) {
        const std::string& name = table.text("stratum", row);
        const int stratum = name == "device" ? 0 : name == "board" ? 1 : name == "rest" ? 2 : -1;
        if (stratum < 0) {
            table.refuse("stratum", row, "'" + name + "'", "device, board or rest");
        }
        const Prior prior{table.number("mean", row, kLargestCoefficient),
                          table.number("spread", row, kLargestCoefficient)};
        if (prior.spread < 0.0) {
            table.refuse("spread", row, fmt::format("{}", prior.spread), "0 or more");
        }
        priors[static_cast<std::size_t>(stratum)] = prior;
    }
    return priors;
}

}  // namespace

Stratum stratum_of(const Camera& camera, AmplifierRef a, AmplifierRef b) {
    if (a.detector == b.detector) {
        return Stratum::device;
    }
    const auto board = [&](AmplifierRef ref) -> const std::string& {
        return camera.detectors[static_cast<std::size_t>(ref.detector)].board;
    };
    return !board(a).empty() && board(a) == board(b) ? Stratum::board : Stratum::rest;
}

const char* name_of(Stratum stratum) {
    switch (stratum) {
        case Stratum::device:
            return "device";
        case Stratum::board:
            return "board";
        case Stratum::rest:
            return "rest";
    }
    return "";
}

Params::Params(const Camera& camera) {
    for (int d = 0; d < static_cast<int>(camera.detectors.size()); ++d) {
        first_.push_back(static_cast<int>(refs_.size()));
        const auto& amplifiers = camera.detectors[static_cast<std::size_t>(d)].amplifiers;
        for (int a = 0; a < static_cast<int>(amplifiers.size()); ++a) {
            refs_.push_back({d, a});
        }
    }
    clock_of_.assign(refs_.size(), -1);
    place_of_.assign(refs_.size(), 0);
    for (const auto& [name, members] : camera.clock_groups()) {
        Clock clock;
        for (const AmplifierRef ref : members) {
            const int index = flat(ref);
            clock_of_[static_cast<std::size_t>(index)] = static_cast<int>(clocks_.size());
            place_of_[static_cast<std::size_t>(index)] = static_cast<int>(clock.members.size());
            clock.members.push_back(index);
        }
        clock.pairs.resize(clock.members.size() * clock.members.size());
        clocks_.push_back(std::move(clock));
    }
    for (const auto& [pair, ticks] : camera.pair_offset_ticks) {
        offsets_[{flat(pair.second), flat(pair.first)}] = ticks;
    }
}

Params Params::from_product(const Camera& camera, const Product& product) {
    if (product.camera != camera.name) {
        throw InputError({product.path, "CAMERA", "'" + product.camera + "'",
                          "'" + camera.name + "'", "use the product of this camera"});
    }
    if (!product.tables.contains("PAIRS")) {
        throw InputError({product.path, "", "no table PAIRS", "a crosstalk product", ""});
    }
    Params params(camera);
    params.calibration_ = fmt::format(
        "{} {}", product.version.empty() ? "unversioned" : product.version, product.digest);
    params.read_pairs(camera, product);
    params.fill_priors(camera, priors_of(product), product.path);
    if (product.tables.contains("LAGS")) {
        params.read_lags(camera, product);
    }
    if (product.tables.contains("BENDS")) {
        params.read_bends(camera, product);
    }
    params.find_largest_coupling();
    return params;
}

void Params::read_pairs(const Camera& camera, const Product& product) {
    const TableView table(product, "PAIRS");
    const PairNames names(camera, *this);
    std::set<std::pair<int, int>> seen;
    for (std::size_t row = 0; row < table.rows(); ++row) {
        const int victim = names.find(table, "victim", row);
        const int source = names.find(table, "source", row);
        if (victim == source) {
            table.refuse("source", row, table.text("source", row),
                         "another amplifier than the victim");
        }
        const int clock = clock_of_[static_cast<std::size_t>(victim)];
        if (clock < 0 || clock_of_[static_cast<std::size_t>(source)] < 0) {
            continue;  // a dead amplifier neither sends nor receives
        }
        if (clock != clock_of_[static_cast<std::size_t>(source)]) {
            table.refuse("source", row, table.text("source", row),
                         "an amplifier read in step with " + table.text("victim", row));
        }
        if (!seen.emplace(victim, source).second) {
            table.refuse("source", row, "this pair a second time", "each pair once");
        }
        Pair& pair = pair_at(victim, source);
        pair.status = status_of(table, row);
        if (!pair.known()) {
            continue;  // takes its prior
        }
        pair.error = static_cast<float>(table.number("error", row, kLargestCoefficient));
        if (pair.error < 0.0F) {
            table.refuse("error", row, fmt::format("{}", pair.error), "0 or more");
        }
        const double coefficient = table.number("coefficient", row, kLargestCoefficient);
        pair.coefficient =
            pair.status == PairStatus::detected ? static_cast<float>(coefficient) : 0.0F;
    }
}

void Params::fill_priors(const Camera& camera, const std::array<std::optional<Prior>, 3>& priors,
                         const std::string& path) {
    for (Clock& clock : clocks_) {
        for (const int victim : clock.members) {
            for (const int source : clock.members) {
                Pair& pair = pair_at(victim, source);
                if (victim == source || pair.known()) {
                    continue;
                }
                const Stratum stratum = stratum_of(camera, ref(victim), ref(source));
                const auto& prior = priors[static_cast<std::size_t>(stratum)];
                if (!prior) {
                    throw InputError(
                        {path, "table PRIORS",
                         fmt::format("no row '{}', yet {} -> {} is not measured", name_of(stratum),
                                     camera.amplifier_name(ref(source)),
                                     camera.amplifier_name(ref(victim))),
                         "a prior for every stratum with unmeasured pairs", ""});
                }
                pair.coefficient = static_cast<float>(prior->mean);
                pair.error = static_cast<float>(prior->spread);
            }
        }
    }
}

void Params::read_lags(const Camera& camera, const Product& product) {
    constexpr double kFarthestTick = 64;
    const TableView table(product, "LAGS");
    const PairNames names(camera, *this);
    for (std::size_t row = 0; row < table.rows(); ++row) {
        const int victim = names.find(table, "victim", row);
        const int source = names.find(table, "source", row);
        const Lag lag{static_cast<int>(table.number("lag", row, kFarthestTick)),
                      table.number("coefficient", row, kLargestCoefficient),
                      table.number("error", row, kLargestCoefficient)};
        if (lag.ticks == 0) {
            table.refuse("lag", row, "0", "a lag other than 0: lag 0 is the pair's coefficient");
        }
        if (lag.error < 0.0) {
            table.refuse("error", row, fmt::format("{}", lag.error), "0 or more");
        }
        if (!in_step(victim, source) || !pair_at(victim, source).known()) {
            continue;  // shapes of pairs that are not known are not known either
        }
        extras_of(victim, source).lags.push_back(lag);
    }
}

void Params::read_bends(const Camera& camera, const Product& product) {
    constexpr double kLargestLevel = 1e9;
    const TableView table(product, "BENDS");
    const PairNames names(camera, *this);
    for (std::size_t row = 0; row < table.rows(); ++row) {
        const int victim = names.find(table, "victim", row);
        const int source = names.find(table, "source", row);
        if (!in_step(victim, source) || !pair_at(victim, source).known()) {
            continue;
        }
        const double onset = table.number("onset_adu", row, kLargestLevel, true);
        if (std::isfinite(onset)) {
            Bend bend{onset, table.number("c1", row, kLargestCoefficient),
                      table.number("c2", row, kLargestCoefficient),
                      table.number("c3", row, kLargestCoefficient),
                      table.number("error", row, kLargestLevel)};
            extras_of(victim, source).bend = bend;
        }
        const double clipped = table.number("clipped", row, kLargestCoefficient, true);
        if (std::isfinite(clipped)) {
            extras_of(victim, source).clipped =
                Clipped{clipped, table.number("clipped_error", row, kLargestCoefficient)};
        }
    }
}

PairExtras& Params::extras_of(int victim, int source) {
    Pair& pair = pair_at(victim, source);
    if (pair.extras < 0) {
        pair.extras = static_cast<std::int32_t>(extras_.size());
        extras_.emplace_back();
    }
    return extras_[static_cast<std::size_t>(pair.extras)];
}

std::vector<int> Params::sources_of(int victim) const {
    const int clock = clock_of_[static_cast<std::size_t>(victim)];
    std::vector<int> sources;
    if (clock >= 0) {
        for (const int member : clocks_[static_cast<std::size_t>(clock)].members) {
            if (member != victim) {
                sources.push_back(member);
            }
        }
    }
    return sources;
}

Pair& Params::pair_at(int victim, int source) {
    return const_cast<Pair&>(pair(victim, source));
}

const Pair& Params::pair(int victim, int source) const {
    const auto v = static_cast<std::size_t>(victim);
    const auto s = static_cast<std::size_t>(source);
    assert(clock_of_[v] >= 0 && clock_of_[v] == clock_of_[s]);
    const Clock& clock = clocks_[static_cast<std::size_t>(clock_of_[v])];
    return clock.pairs[static_cast<std::size_t>(place_of_[v]) * clock.members.size() +
                       static_cast<std::size_t>(place_of_[s])];
}

int Params::offset_ticks(int victim, int source) const {
    const auto found = offsets_.find({victim, source});
    return found == offsets_.end() ? 0 : found->second;
}

void Params::find_largest_coupling() {
    for (const Clock& clock : clocks_) {
        for (const Pair& pair : clock.pairs) {
            double sum = std::abs(pair.coefficient) + 2.0 * pair.error;
            if (const PairExtras* more = extras(pair)) {
                double clipped = 0.0;
                if (more->clipped) {
                    clipped = std::abs(more->clipped->coefficient) + 2.0 * more->clipped->error;
                }
                sum = std::max(sum, clipped);
                for (const Lag& lag : more->lags) {
                    sum += std::abs(lag.coefficient) + 2.0 * lag.error;
                }
            }
            largest_coupling_ = std::max(largest_coupling_, sum);
        }
    }
}

}  // namespace straymark::crosstalk
