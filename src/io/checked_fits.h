#pragma once

#include <cstdint>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <vector>

namespace straymark::io {

/// One header-data unit of a FITS file.
struct FitsPart {
    std::string name;  ///< EXTNAME; empty: none
    bool is_image = false;
    int width = 0;  ///< images of two axes; 0: no data
    int height = 0;
    std::int64_t rows = 0;  ///< tables
};

/// A FITS file that this project wrote (masks, truth), read by cfitsio behind checks: plain name,
/// regular file, sizes that fit the file, and sums verified before a part is decoded, so that a
/// damaged byte is an error and not a wrong pixel. One object belongs to one thread.
class CheckedFits {
public:
    enum class Sums { required, where_present };

    /// Opens `path` and lists its parts. Throws InputError: not there, not FITS, damaged header.
    CheckedFits(std::string path, Sums sums);
    ~CheckedFits();
    CheckedFits(CheckedFits&&) noexcept;
    CheckedFits& operator=(CheckedFits&&) noexcept;

    [[nodiscard]] const std::string& path() const { return path_; }
    [[nodiscard]] const std::vector<FitsPart>& parts() const { return parts_; }
    /// Index of the part of this name; nothing where there is none.
    [[nodiscard]] std::optional<int> find(const std::string& name) const;
    /// The same; throws InputError naming what is there.
    [[nodiscard]] int required(const std::string& name) const;

    /// A keyword of the primary header as text; nothing where absent.
    [[nodiscard]] std::optional<std::string> primary_text(const std::string& keyword) const;

    /// The pixels of an image, row by row from the first. Throws InputError where the sums do not
    /// match, or the data do not decode.
    [[nodiscard]] std::vector<float> float_image(int part) const;
    [[nodiscard]] std::vector<std::int16_t> int16_image(int part) const;

    /// Columns of a table. Throw InputError where there is no such column, or the sums do not
    /// match. number_column: every cell is finite unless `allow_nan`.
    [[nodiscard]] std::vector<std::string> text_column(int part, const std::string& name) const;
    [[nodiscard]] std::vector<double> number_column(int part, const std::string& name,
                                                    bool allow_nan = false) const;
    /// Variable-length arrays of numbers.
    [[nodiscard]] std::vector<std::vector<float>> array_column(int part,
                                                               const std::string& name) const;

    /// Throws InputError about this file.
    [[noreturn]] void refuse(const std::string& place, const std::string& found,
                             const std::string& expected, const std::string& advice) const;

private:
    struct Handle;
    void check_is_plain_fits();
    void enter(int part) const;
    void verify(int part) const;
    void scan_parts();
    [[nodiscard]] int column_of(int part, const std::string& name) const;
    [[nodiscard]] std::string place_of(int part) const;

    std::string path_;
    Sums sums_;
    std::int64_t bytes_ = 0;
    std::unique_ptr<Handle> handle_;
    std::vector<FitsPart> parts_;
    mutable std::vector<bool> verified_;
};

}  // namespace straymark::io
