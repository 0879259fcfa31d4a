#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "io/files.h"

namespace straymark::io {

/// Reads comma-separated text with a header row, one row at a time (RFC 4180: quotes, doubled
/// quotes, CRLF). Lines that begin with '#' and blank lines are skipped. Memory is bounded by the
/// longest line, which may have at most 64 KiB.
class CsvReader {
public:
    /// Throws InputError: not a regular file, no header, duplicate column.
    explicit CsvReader(const std::string& path);
    ~CsvReader();
    CsvReader(CsvReader&&) noexcept;
    CsvReader& operator=(CsvReader&&) noexcept;

    [[nodiscard]] const std::vector<std::string>& columns() const { return columns_; }
    /// Index of a column; nothing where it does not exist.
    [[nodiscard]] std::optional<int> column(std::string_view name) const;
    /// Index of a column that must exist; the error lists those there.
    [[nodiscard]] int required_column(std::string_view name) const;

    /// The next row; false at the end. Throws InputError where a row has another number of fields,
    /// or a byte of value zero.
    bool next();
    [[nodiscard]] std::string_view field(int column) const;
    /// A finite number. Throws InputError naming line and column.
    [[nodiscard]] double number(int column) const;
    [[nodiscard]] int integer(int column) const;
    [[nodiscard]] int line() const { return line_; }
    /// Throws InputError for a field of this row.
    [[noreturn]] void refuse(int column, const std::string& expected) const;

private:
    bool read_line();
    bool read_text_line();
    void split();

    std::string path_;
    InputFile file_;
    std::int64_t offset_ = 0;  ///< in the file, of the end of `block_`
    std::vector<char> block_;
    std::size_t at_ = 0;  ///< in `block_`
    std::vector<std::string> columns_;
    std::string text_;                 ///< of the current line
    std::vector<std::string> fields_;  ///< reused
    int line_ = 0;
};

}  // namespace straymark::io
