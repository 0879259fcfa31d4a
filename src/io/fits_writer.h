#pragma once

#include <cstddef>
#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <variant>
#include <vector>

#include "io/files.h"
#include "io/fits_cards.h"
#include "io/header_writer.h"

/// A small serialiser of FITS 4.0 files: headers, binary tables and raw data units, each with
/// CHECKSUM and DATASUM, built in memory and written in one go. The bytes depend on the content
/// alone: no dates, no addresses.

namespace straymark::io {

inline constexpr std::size_t kFitsBlock = 2880;

/// One header-data unit, complete: both parts are multiples of 2880 bytes.
struct FitsUnit {
    std::string header;
    std::vector<std::byte> data;
};

/// The ones'-complement sum of big-endian 32-bit words, FITS 4.0 section 4.4.2.7 and appendix J.
/// Precondition: a multiple of four bytes. `sum`: of what came before.
std::uint32_t fits_sum(std::span<const std::byte> bytes, std::uint32_t sum = 0);

/// Completes a unit: pads the data with `fill`, adds DATASUM, CHECKSUM and END.
FitsUnit finished_unit(HeaderCards cards, std::vector<std::byte> data, std::byte fill = {});

/// The mandatory cards of a binary table's header, up to TFIELDS.
HeaderCards binary_table_cards(std::size_t row_bytes, std::size_t rows, std::size_t heap_bytes,
                               std::size_t columns);

/// The columns of a binary table. All have the same number of rows. Strings pass through
/// `printable_text` and take the width of the longest; a cell of `std::vector<float>` is a
/// variable-length array.
using ColumnValues =
    std::variant<std::vector<bool>, std::vector<std::int16_t>, std::vector<std::int32_t>,
                 std::vector<std::int64_t>, std::vector<float>, std::vector<double>,
                 std::vector<std::string>, std::vector<std::vector<float>>>;
struct TableColumn {
    std::string name;
    std::string unit;  ///< as in FITS 4.0 section 4.3; empty: none
    ColumnValues values;
};
/// `cards` follow the mandatory ones. Precondition: at least one column, 999 at most.
FitsUnit table_unit(std::string_view name, const std::vector<TableColumn>& columns,
                    const HeaderCards& cards = {});

/// Writes a file of a primary unit without data and `extensions`, complete or not at all
/// (OutputFile). The primary header holds the mandatory cards, FILESIZE (the bytes of the whole
/// file, so that one cut short shows in its first header), and `primary`.
void write_fits(const std::string& path, const HeaderCards& primary,
                std::span<const FitsUnit> extensions);

/// The primary header of a file that `write_fits` wrote, where that is whole: its checksum holds
/// and the file has the size it states. Nothing for any other file.
std::optional<FitsHeader> whole_primary_header(const InputFile& file);

}  // namespace straymark::io
