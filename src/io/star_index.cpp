#include "io/star_index.h"

#include <algorithm>
#include <fmt/format.h>
#include <initializer_list>
#include <optional>
#include <string_view>
#include <utility>

#include "core/error.h"
#include "io/byte_order.h"
#include "io/fits_cards.h"
#include "io/fits_scan.h"
#include "io/star_layout.h"
#include "io/star_record.h"

namespace straymark::io {
namespace {

constexpr std::int64_t kLongestRow = 4096;

/// One table and its header.
struct Table {
    std::string place;
    FitsHeader header;
    StarListTable data;
};

class IndexReader {
public:
    explicit IndexReader(const InputFile& file) : file_(file), structure_(scan_fits(file)) {}

    StarListIndex read() {
        StarListIndex out;
        read_primary(out);
        const Table stars = table(1, {kStarsTable});
        out.stars = stars.data;
        read_columns(stars.header, out);
        read_index(table(2, {kIndexTable}), out);
        const Table coverage = table(3, {kDiscsTable, kCellsTable});
        if (coverage.place == kDiscsTable) {
            read_discs(coverage, out.coverage);
        } else {
            read_cells(coverage, out.coverage);
        }
        return out;
    }

private:
    void read_primary(StarListIndex& out) const {
        const FitsHeader header = read_header(file_, structure_.hdus.front());
        const auto format = header.find(kFormatCard);
        if (!format || format->text != kStarListFormat) {
            refuse_star_list(
                file_.path(), "primary header",
                format ? fmt::format("FORMAT '{}'", printable(format->text)) : "no FORMAT card",
                fmt::format("'{}'", kStarListFormat));
        }
        const auto content = header.find(kContentCard);
        if (!content || structure_.hdus.size() != 4) {
            refuse_star_list(file_.path(), "",
                             fmt::format("{} HDUs, {} CONTENT card", structure_.hdus.size(),
                                         content ? "a" : "no"),
                             "4 HDUs, a CONTENT card");
        }
        out.digest = content->text;
    }

    /// Table `number`, which must have one of these names; its place becomes that name.
    [[nodiscard]] Table table(std::size_t number,
                              std::initializer_list<std::string_view> names) const {
        const FitsHdu& hdu = structure_.hdus[number];
        if (std::find(names.begin(), names.end(), hdu.name) == names.end()) {
            refuse_star_list(file_.path(), place_of(hdu), "another name",
                             fmt::format("{}", fmt::join(names, " or ")));
        }
        Table out{hdu.name, read_header(file_, hdu), {hdu.data_offset, 0, 0}};
        out.data.row_bytes = count(out, "NAXIS1");
        out.data.rows = count(out, "NAXIS2");
        if (out.data.row_bytes <= 0 || out.data.row_bytes > kLongestRow ||
            out.data.rows > hdu.data_bytes / out.data.row_bytes) {
            refuse_star_list(file_.path(), out.place,
                             fmt::format("{} rows of {} bytes in {} bytes", out.data.rows,
                                         out.data.row_bytes, hdu.data_bytes),
                             "a complete table");
        }
        return out;
    }

    [[nodiscard]] std::int64_t count(const Table& table, const char* keyword) const {
        const auto card = table.header.find(keyword);
        const auto value = card ? card->integer() : std::nullopt;
        if (!value || *value < 0) {
            refuse_star_list(file_.path(), fmt::format("{}, {}", table.place, keyword),
                             card ? printable(card->text) : "no such card", "a whole number");
        }
        return *value;
    }

    [[nodiscard]] static std::string column_card(const FitsHeader& header, const char* stem,
                                                 std::size_t number) {
        const auto card = header.find(fmt::format("{}{}", stem, number));
        return card ? card->text : "";
    }

    void read_columns(const FitsHeader& header, StarListIndex& out) const {
        const auto wrong = [&](std::size_t number) {
            refuse_star_list(file_.path(), fmt::format("STARS, column {}", number),
                             fmt::format("{} {}", printable(column_card(header, "TTYPE", number)),
                                         printable(column_card(header, "TFORM", number))),
                             "the columns of an indexed star list");
        };
        const std::int64_t fixed = static_cast<std::int64_t>(kFixedStarBytes);
        const auto fields = header.find("TFIELDS");
        const std::int64_t columns = fields ? fields->integer().value_or(0) : 0;
        const std::int64_t mags = columns - 1 - static_cast<std::int64_t>(kFixedStarColumns.size());
        const std::int64_t id_width = out.stars.row_bytes - fixed - 4 * mags;
        if (mags < 0 || mags > static_cast<std::int64_t>(kMostMagColumns) || id_width < 1 ||
            id_width > static_cast<std::int64_t>(kLongestStarId) ||
            column_card(header, "TTYPE", 1) != "id" ||
            column_card(header, "TFORM", 1) != fmt::format("{}A", id_width)) {
            wrong(1);
        }
        out.id_width = static_cast<std::size_t>(id_width);
        std::size_t number = 2;
        for (const FixedStarColumn& column : kFixedStarColumns) {
            if (column_card(header, "TTYPE", number) != column.name ||
                column_card(header, "TFORM", number) != column.form) {
                wrong(number);
            }
            ++number;
        }
        for (std::int64_t i = 0; i < mags; ++i, ++number) {
            if (column_card(header, "TFORM", number) != "1E") {
                wrong(number);
            }
            out.mags.push_back(column_card(header, "TTYPE", number));
        }
    }

    [[nodiscard]] double cell_size(const Table& table) const {
        const auto card = table.header.find(kCellSizeCard);
        const double size = card ? card->number().value_or(0.0) : 0.0;
        if (!(size >= 0.05 && size <= 10.0)) {
            refuse_star_list(file_.path(), fmt::format("{}, CELLSIZE", table.place),
                             card ? printable(card->text) : "no such card", "0.05 to 10 degrees");
        }
        return size;
    }

    /// All bytes of a small table, once its shape was found right.
    [[nodiscard]] std::vector<std::byte> read_data(const Table& table, std::int64_t row_bytes,
                                                   std::int64_t most_rows) const {
        if (table.data.row_bytes != row_bytes || table.data.rows > most_rows) {
            refuse_star_list(
                file_.path(), table.place,
                fmt::format("{} rows of {} bytes", table.data.rows, table.data.row_bytes),
                fmt::format("at most {} rows of {} bytes", most_rows, row_bytes));
        }
        std::vector<std::byte> data(static_cast<std::size_t>(table.data.rows * row_bytes));
        file_.read_at(table.data.offset, data);
        return data;
    }

    void read_index(const Table& table, StarListIndex& out) const {
        out.cell_size_deg = cell_size(table);
        const std::int32_t cell_count = SkyCells(out.cell_size_deg).count();
        constexpr std::int64_t kRow = 4 + 8 + 4;
        const std::vector<std::byte> data = read_data(table, kRow, cell_count);
        out.cells.reserve(static_cast<std::size_t>(table.data.rows));
        out.first.reserve(static_cast<std::size_t>(table.data.rows) + 1);
        std::int64_t row = 0;
        std::int32_t last = -1;
        for (std::int64_t i = 0; i < table.data.rows; ++i) {
            const std::byte* const at = data.data() + i * kRow;
            const auto cell = load_big_endian<std::int32_t>(at);
            const auto first = load_big_endian<std::int64_t>(at + 4);
            const auto rows = load_big_endian<std::int32_t>(at + 12);
            if (cell <= last || cell >= cell_count || first != row || rows <= 0) {
                refuse_star_list(file_.path(), fmt::format("INDEX, row {}", i + 1),
                                 fmt::format("cell {}, first {}, rows {}", cell, first, rows),
                                 "ascending cells that follow each other");
            }
            out.cells.push_back(cell);
            out.first.push_back(first);
            row += rows;
            last = cell;
        }
        out.first.push_back(row);
        if (row != out.stars.rows) {
            refuse_star_list(file_.path(), "INDEX", fmt::format("{} stars", row),
                             fmt::format("{} as in STARS", out.stars.rows));
        }
    }

    void read_discs(const Table& table, StarCoverage& out) const {
        constexpr std::int64_t kMostDiscs = 100000;
        constexpr std::int64_t kRow = 24;  // three reals of 8 bytes
        const std::vector<std::byte> data = read_data(table, kRow, kMostDiscs);
        for (std::int64_t i = 0; i < table.data.rows; ++i) {
            const std::byte* const at = data.data() + i * kRow;
            out.declared.push_back({stored_position(at), load_big_endian<double>(at + 16)});
        }
    }

    void read_cells(const Table& table, StarCoverage& out) const {
        out.cell_size_deg = cell_size(table);
        constexpr std::int64_t kRow = 4;
        const std::vector<std::byte> data =
            read_data(table, kRow, SkyCells(out.cell_size_deg).count());
        for (std::int64_t i = 0; i < table.data.rows; ++i) {
            const auto cell = load_big_endian<std::int32_t>(data.data() + i * kRow);
            if (!out.cells.empty() && cell <= out.cells.back()) {
                refuse_star_list(file_.path(), fmt::format("CELLS, row {}", i + 1),
                                 fmt::format("cell {}", cell), "ascending cells");
            }
            out.cells.push_back(cell);
        }
    }

    const InputFile& file_;
    FitsStructure structure_;
};

}  // namespace

StarListIndex read_star_index(const InputFile& file) {
    return IndexReader(file).read();
}

void refuse_star_list(const std::string& path, std::string place, std::string found,
                      std::string expected) {
    throw InputError({path, std::move(place), std::move(found), std::move(expected),
                      "make the list again with 'straymark stars import'"});
}

}  // namespace straymark::io
