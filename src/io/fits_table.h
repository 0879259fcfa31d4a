#pragma once

#include <cstddef>
#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <variant>
#include <vector>

#include "io/files.h"
#include "io/fits_scan.h"

/// Binary tables (FITS 4.0 section 7.3) from files that anybody may have written: the header is
/// read by fits_scan, the rows by bounds-checked code. Nothing is decompressed and no library is
/// handed a name.

namespace straymark::io {

/// One column as the header describes it.
struct TableField {
    std::string name;  ///< TTYPEn in lower case
    char code = 'X';   ///< letter of TFORMn
    std::int64_t repeat = 1;
    std::size_t offset = 0;  ///< in the row
    double scale = 1.0;      ///< TSCALn
    double zero = 0.0;       ///< TZEROn
    std::optional<std::int64_t> null;

    [[nodiscard]] bool plain() const { return scale == 1.0 && zero == 0.0 && !null; }
    /// One value a row: a number, a logical, or a string.
    [[nodiscard]] bool scalar() const;
};

/// One table, in memory. Checked when read: the columns fill the row exactly, names are not empty
/// and unique.
class BinaryTable {
public:
    /// Nothing where this unit is no binary table. Throws InputError, naming HDU and keyword.
    static std::optional<BinaryTable> read(const InputFile& file, const FitsHdu& hdu);

    [[nodiscard]] const std::string& name() const { return name_; }  ///< EXTNAME
    [[nodiscard]] std::size_t rows() const { return rows_; }
    [[nodiscard]] const std::vector<TableField>& fields() const { return fields_; }
    [[nodiscard]] const TableField* find(std::string_view field) const;

    /// A column whose cells are stored as T (int16, int32, int64, float, double), unscaled; exact.
    /// Throws InputError where there is none such.
    template <typename T>
    [[nodiscard]] std::vector<T> stored(std::string_view field) const;
    /// A column of strings, trailing blanks removed. Throws InputError where there is none such or
    /// a character is not printable ASCII.
    [[nodiscard]] std::vector<std::string> strings(std::string_view field) const;

    /// Any scalar column by value: integers and logicals as int64, scaled or null-bearing integers
    /// (null: NaN) and reals as double.
    using Values =
        std::variant<std::vector<double>, std::vector<std::int64_t>, std::vector<std::string>>;
    [[nodiscard]] Values values(const TableField& field) const;

    [[noreturn]] void refuse(const std::string& place, const std::string& found,
                             const std::string& expected, const std::string& advice = {}) const;

private:
    BinaryTable(std::string path, std::string place)
        : path_(std::move(path)), place_(std::move(place)) {}
    void read_layout(const FitsHeader& header);
    [[nodiscard]] TableField read_field(const FitsHeader& header, std::int64_t number) const;
    [[nodiscard]] const std::byte* cell(std::size_t row, const TableField& field) const {
        return data_.data() + row * row_bytes_ + field.offset;
    }

    std::string path_, place_;
    std::string name_;
    std::size_t row_bytes_ = 0;
    std::size_t rows_ = 0;
    std::vector<TableField> fields_;
    std::vector<std::byte> data_;
};

/// The units of a file of tables. Throws InputError as scan_fits does, and also where anything lies
/// behind the last unit, where a CHECKSUM or DATASUM does not hold, and where a file of this
/// program (its primary header states FILESIZE) has another size or a unit without CHECKSUM.
std::vector<FitsHdu> sound_units(const InputFile& file);

}  // namespace straymark::io
