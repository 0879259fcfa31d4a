#include <array>
#include <charconv>
#include <cmath>
#include <cstdint>
#include <cstdio>
#include <fmt/format.h>
#include <memory>
#include <string>
#include <unistd.h>
#include <vector>

#include "cli/command.h"
#include "core/error.h"
#include "io/star_import.h"

namespace straymark::cli {
namespace {

struct ImportOptions {
    std::string from, to;
    std::vector<std::string> columns, covers;
};

/// "NAME=COLUMN"
void add_column(const std::string& text, io::StarImportSettings& settings) {
    const std::size_t equals = text.find('=');
    if (equals == std::string::npos || equals == 0 || equals + 1 == text.size()) {
        throw UsageError(fmt::format("--column {}: expected NAME=COLUMN, as in ra=RAJ2000", text));
    }
    settings.columns[text.substr(0, equals)] = text.substr(equals + 1);
}

/// "RA,DEC,RADIUS", degrees
io::CoveredDisc covered_disc(const std::string& text) {
    std::array<double, 3> values{};
    const char* at = text.data();
    const char* const end = text.data() + text.size();
    bool good = true;
    for (std::size_t i = 0; good && i < values.size(); ++i) {
        const auto [stopped, error] = std::from_chars(at, end, values[i]);
        const bool last = i + 1 == values.size();
        good = error == std::errc() && std::isfinite(values[i]) &&
               (last ? stopped == end : stopped != end && *stopped == ',');
        at = stopped + (last ? 0 : 1);
    }
    if (!good || values[0] < 0.0 || values[0] >= 360.0 || std::abs(values[1]) > 90.0 ||
        values[2] <= 0.0 || values[2] > 180.0) {
        throw UsageError(fmt::format(
            "--covers {}: expected RA,DEC,RADIUS in degrees, as in 84.0,28.0,2.5", text));
    }
    return {{values[0], values[1]}, values[2]};
}

/// Rows read so far, on standard error where a progress bar would be: how many there will be is not
/// known before the end.
class RowCounter {
public:
    explicit RowCounter(const CommandLine& line)
        : shown_(!line.quiet && !line.json && isatty(fileno(stderr)) == 1) {}
    ~RowCounter() {
        if (shown_) {
            fmt::print(stderr, "\r\033[K");
        }
    }
    RowCounter(const RowCounter&) = delete;
    RowCounter& operator=(const RowCounter&) = delete;
    void show(std::int64_t rows) const {
        if (shown_) {
            fmt::print(stderr, "\rstars {}\033[K", rows);
        }
    }

private:
    bool shown_;
};

std::string coverage_text(const io::StarCoverage& coverage) {
    if (!coverage.declared.empty()) {
        return fmt::format("coverage: {} declared discs", coverage.declared.size());
    }
    if (coverage.cells.empty()) {
        return "coverage: none found (too few stars); declare it with --covers RA,DEC,RADIUS";
    }
    return fmt::format("coverage: {} cells of {:.3g} degrees that hold stars",
                       coverage.cells.size(), coverage.cell_size_deg);
}

int import(const CommandLine& line, const ImportOptions& options) {
    io::StarImportSettings settings;
    for (const std::string& text : options.columns) {
        add_column(text, settings);
    }
    for (const std::string& text : options.covers) {
        settings.covers.push_back(covered_disc(text));
    }
    const io::StarImportReport report = [&] {
        const RowCounter counter(line);
        return io::import_star_list(options.from, options.to, settings,
                                    [&counter](std::int64_t rows) { counter.show(rows); });
    }();
    Value::Array mags(report.mag_columns.begin(), report.mag_columns.end());
    print_json(line, Value::Object{{"out", options.to},
                                   {"stars", report.stars},
                                   {"magnitudes", std::move(mags)},
                                   {"declared_discs", report.coverage.declared.size()},
                                   {"covered_cells", report.coverage.cells.size()},
                                   {"cell_size_deg", report.coverage.cell_size_deg}});
    say(line, fmt::format("{}: {} stars, {}", options.to, report.stars,
                          fmt::join(report.mag_columns, ", ")));
    say(line, coverage_text(report.coverage));
    return kDone;
}

}  // namespace

void add_stars(CommandLine& line) {
    CLI::App* group = line.app.add_subcommand("stars", "prepares the star list");
    group->require_subcommand(1);
    const auto options = std::make_shared<ImportOptions>();
    CLI::App* command = line.add(
        "import", "turns a star list (FITS table, VOTable, CSV) into the indexed list",
        "straymark stars import gaia.fits --column id=source_id --column epoch=ref_epoch \\\n"
        "    --column mag_r=r_mag --out stars.fits",
        [&line, options] { return import(line, *options); }, group);
    command->add_option("FILE", options->from, "the star list to read")->required();
    command->add_option("--out", options->to, "the indexed list to write")->required();
    command->add_option("--column", options->columns,
                        "NAME=COLUMN: what the table calls one of id, ra, dec, mag, mag_FILTER, "
                        "epoch, pmra, pmdec");
    command->add_option("--covers", options->covers,
                        "RA,DEC,RADIUS: a disc (degrees) that the list covers; default: found "
                        "from its stars");
}

}  // namespace straymark::cli
