#include <algorithm>
#include <cassert>
#include <fmt/format.h>
#include <iterator>
#include <utility>

#include "io/content_digest.h"
#include "io/fits_writer.h"
#include "io/star_coverage.h"
#include "io/star_file.h"
#include "io/star_layout.h"

namespace straymark::io {
namespace {

/// Sends bytes to a file in large pieces and keeps their digest.
class DigestedOutput {
public:
    explicit DigestedOutput(OutputFile& file) : file_(file) {}
    void write(std::span<const std::byte> bytes) {
        buffer_.insert(buffer_.end(), bytes.begin(), bytes.end());
        if (buffer_.size() >= kBuffer) {
            flush();
        }
    }
    void flush() {
        file_.write(buffer_);
        digest_.add(buffer_);
        buffer_.clear();
    }
    [[nodiscard]] std::string digest() const { return digest_.text(); }

private:
    static constexpr std::size_t kBuffer = 1 << 20;
    OutputFile& file_;
    ContentDigest digest_;
    std::vector<std::byte> buffer_;
};

std::span<const std::byte> bytes_of(const std::string& text) {
    return std::as_bytes(std::span(text));
}

std::size_t padding(std::size_t bytes) {
    return (kFitsBlock - bytes % kFitsBlock) % kFitsBlock;
}

std::string stars_header(std::size_t id_width, std::int64_t rows,
                         const std::vector<std::string>& mags) {
    const std::size_t row_bytes = id_width + star_number_bytes(mags.size());
    HeaderCards cards = binary_table_cards(row_bytes, static_cast<std::size_t>(rows), 0,
                                           1 + kFixedStarColumns.size() + mags.size());
    int number = 0;
    const auto add_column = [&](std::string_view name, std::string_view form,
                                std::string_view unit) {
        ++number;
        cards.add_text(fmt::format("TTYPE{}", number), name);
        cards.add_text(fmt::format("TFORM{}", number), form);
        if (!unit.empty()) {
            cards.add_text(fmt::format("TUNIT{}", number), unit);
        }
    };
    add_column("id", fmt::format("{}A", id_width), "");
    for (const FixedStarColumn& column : kFixedStarColumns) {
        add_column(column.name, column.form, column.unit);
    }
    for (const std::string& mag : mags) {
        add_column(mag, "1E", "mag");
    }
    cards.add_text("EXTNAME", kStarsTable);
    std::string text = cards.text() + fmt::format("{:<80}", "END");
    text.append(padding(text.size()), ' ');
    return text;
}

/// Where each cell's rows are, and where the list has been filled.
struct Contents {
    std::vector<std::int32_t> cells;
    std::vector<std::int64_t> first;
    std::vector<std::int32_t> rows;
    CoverageFinder coverage;

    void add(const StarSorter::Sorted& star) {
        if (cells.empty() || cells.back() != star.cell) {
            cells.push_back(star.cell);
            first.push_back(first.empty() ? 0 : first.back() + rows.back());
            rows.push_back(0);
        }
        ++rows.back();
        coverage.add(stored_position(star.numbers.data()));
    }
};

void write_stars(DigestedOutput& out, StarSorter& sorter, const std::vector<std::string>& mags,
                 Contents& contents) {
    const std::size_t id_width = sorter.longest_id();
    out.write(bytes_of(stars_header(id_width, sorter.count(), mags)));
    std::vector<std::byte> id(id_width);
    std::size_t bytes = 0;
    sorter.drain([&](const StarSorter::Sorted& star) {
        contents.add(star);
        const auto text = std::as_bytes(std::span(star.id));
        std::fill(std::copy(text.begin(), text.end(), id.begin()), id.end(), std::byte{});
        out.write(id);
        out.write(star.numbers);
        bytes += id.size() + star.numbers.size();
    });
    out.write(std::vector<std::byte>(padding(bytes)));
}

FitsUnit index_unit(const Contents& contents, double cell_size_deg) {
    HeaderCards cards;
    cards.add_real(kCellSizeCard, cell_size_deg, "height of a cell, degrees");
    return table_unit(
        kIndexTable,
        {{"cell", "", contents.cells}, {"first", "", contents.first}, {"rows", "", contents.rows}},
        cards);
}

FitsUnit coverage_unit(const StarCoverage& coverage) {
    if (coverage.declared.empty()) {
        HeaderCards cards;
        cards.add_real(kCellSizeCard, coverage.cell_size_deg, "height of a cell, degrees");
        return table_unit(kCellsTable, {{"cell", "", coverage.cells}}, cards);
    }
    std::vector<double> ra, dec, radius;
    for (const CoveredDisc& disc : coverage.declared) {
        ra.push_back(disc.centre.ra_deg);
        dec.push_back(disc.centre.dec_deg);
        radius.push_back(disc.radius_deg);
    }
    return table_unit(kDiscsTable,
                      {{"ra", "deg", ra}, {"dec", "deg", dec}, {"radius", "deg", radius}});
}

FitsUnit primary_unit(std::int64_t stars, const std::string& digest) {
    HeaderCards cards;
    cards.add_logical("SIMPLE", true);
    cards.add_integer("BITPIX", 8);
    cards.add_integer("NAXIS", 0);
    cards.add_logical("EXTEND", true);
    cards.add_text(kFormatCard, kStarListFormat, "an indexed star list");
    cards.add_integer("NSTARS", stars, "rows of the table STARS");
    cards.add_text(kContentCard, digest);
    return finished_unit(cards, {});
}

}  // namespace

StarCoverage write_star_list(const std::string& path, const SkyCells& cells, StarSorter& sorter,
                             const std::vector<std::string>& mag_columns,
                             std::vector<CoveredDisc> declared) {
    OutputFile file(path);
    file.write(std::vector<std::byte>(kFitsBlock));  // the primary header, known at the end
    DigestedOutput out(file);
    Contents contents;
    const std::int64_t stars = sorter.count();
    write_stars(out, sorter, mag_columns, contents);
    StarCoverage coverage = declared.empty()
                                ? contents.coverage.found()
                                : StarCoverage{std::move(declared), kStarCellSize_deg, {}};
    for (const FitsUnit& unit :
         {index_unit(contents, cells.zone_height_deg()), coverage_unit(coverage)}) {
        out.write(bytes_of(unit.header));
        out.write(unit.data);
    }
    out.flush();
    const FitsUnit primary = primary_unit(stars, out.digest());
    assert(primary.header.size() == kFitsBlock);
    file.write_at(0, bytes_of(primary.header));
    file.commit();
    return coverage;
}

}  // namespace straymark::io
