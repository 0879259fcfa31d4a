#include "io/star_fits.h"

#include <algorithm>
#include <array>
#include <cstdint>
#include <fitsio.h>
#include <fmt/format.h>
#include <limits>
#include <optional>

#include "core/error.h"
#include "io/files.h"
#include "io/fits_cards.h"
#include "io/fits_scan.h"

namespace straymark::io {
namespace {

struct CloseFits {
    void operator()(fitsfile* file) const {
        int status = 0;
        fits_close_file(file, &status);
    }
};
using FitsFile = std::unique_ptr<fitsfile, CloseFits>;

class FitsStarRows final : public StarRows {
public:
    explicit FitsStarRows(const std::string& path) : path_(path) {
        find_table();
        open();
        size_up();
        read_columns();
    }

    [[nodiscard]] const std::vector<Column>& columns() const override { return columns_; }

    bool next() override {
        if (row_ >= rows_) {
            return false;
        }
        ++row_;
        if (row_ > chunk_first_ + chunk_rows_ - 1) {
            chunk_first_ = row_;
            for (Cells& cells : chunk_) {
                cells.loaded = false;
            }
        }
        return true;
    }

    [[nodiscard]] std::string place() const override {
        return fmt::format("{}, row {}", table_, row_);
    }

    [[nodiscard]] double number(int column) const override {
        const Cells& cells = loaded(column);
        if (cells.kind == Kind::text) {
            refuse(column, "text", "numbers");
        }
        const auto i = static_cast<std::size_t>(row_ - chunk_first_);
        return cells.kind == Kind::whole ? to_number(cells.whole[i]) : cells.real[i];
    }

    [[nodiscard]] std::string text(int column) const override {
        const Cells& cells = loaded(column);
        const auto i = static_cast<std::size_t>(row_ - chunk_first_);
        switch (cells.kind) {
            case Kind::text:
                return cells.text[i];
            case Kind::whole:
                return cells.whole[i] == kNull ? "" : fmt::format("{}", cells.whole[i]);
            default:
                refuse(column, "real numbers", "text or whole numbers");
        }
    }

private:
    enum class Kind { text, whole, real, other };
    /// One column of the rows that are in memory.
    struct Cells {
        Kind kind = Kind::other;
        std::size_t width = 0;  ///< of text
        bool loaded = false;
        std::vector<std::string> text;
        std::vector<std::int64_t> whole;
        std::vector<double> real;
    };
    static constexpr std::int64_t kNull = std::numeric_limits<std::int64_t>::min();

    static double to_number(std::int64_t value) {
        return value == kNull ? std::numeric_limits<double>::quiet_NaN()
                              : static_cast<double>(value);
    }

    void check(int status, const std::string& place, const std::string& expected) const {
        if (status == 0) {
            return;
        }
        std::array<char, FLEN_STATUS> text{};
        fits_get_errstatus(status, text.data());
        fits_clear_errmsg();
        throw InputError({path_, place, text.data(), expected, "the file may be damaged"});
    }

    /// Before the library sees the file: is its structure whole, and where is its table?
    void find_table() {
        const InputFile file(path_);
        const FitsStructure structure = scan_fits(file);
        for (const FitsHdu& hdu : structure.hdus) {
            const FitsHeader header = read_header(file, hdu);
            const auto extension = header.find("XTENSION");
            if (!extension || (extension->text != "BINTABLE" && extension->text != "TABLE") ||
                hdu.kind == HduKind::compressed_image) {
                continue;
            }
            table_ = place_of(hdu);
            number_ = hdu.number + 1;
            if (header.find("ZTABLE")) {
                throw InputError(
                    {path_, table_, "a compressed table", "a plain one", "decompress it first"});
            }
            return;
        }
        throw InputError({path_, "", "no table", "a table of stars", ""});
    }

    void open() {
        // The library expands "~" at the start of a name.
        const std::string plain = path_.starts_with('/') ? path_ : "./" + path_;
        fitsfile* file = nullptr;
        int status = 0;
        fits_open_diskfile(&file, plain.c_str(), READONLY, &status);
        file_.reset(file);
        int type = 0;
        fits_movabs_hdu(file, number_, &type, &status);
        check(status, table_, "a table that can be read");
    }

    void size_up() {
        int status = 0;
        LONGLONG row_bytes = 0;
        fits_read_key(file_.get(), TLONGLONG, "NAXIS1", &row_bytes, nullptr, &status);
        fits_get_num_rowsll(file_.get(), &rows_, &status);
        check(status, table_, "a table header");
        constexpr LONGLONG kMostRows = 4096;
        constexpr LONGLONG kChunkBytes = 4 << 20;
        chunk_rows_ =
            std::clamp<LONGLONG>(kChunkBytes / std::max<LONGLONG>(row_bytes, 1), 1, kMostRows);
        chunk_first_ = 1 - chunk_rows_;
    }

    void read_columns() {
        int status = 0;
        int count = 0;
        fits_get_num_cols(file_.get(), &count, &status);
        check(status, table_, "columns");
        for (int number = 1; number <= count; ++number) {
            columns_.push_back(
                {key(fmt::format("TTYPE{}", number)), key(fmt::format("TUNIT{}", number))});
            chunk_.push_back(column_cells(number));
        }
    }

    [[nodiscard]] std::string key(const std::string& name) const {
        std::array<char, FLEN_VALUE> value{};
        int missing = 0;
        fits_read_key(file_.get(), TSTRING, name.c_str(), value.data(), nullptr, &missing);
        fits_clear_errmsg();
        return missing == 0 ? std::string(value.data()) : std::string();
    }

    [[nodiscard]] Cells column_cells(int number) const {
        int status = 0;
        int type = 0;
        LONGLONG repeat = 0;
        LONGLONG width = 0;
        fits_get_eqcoltypell(file_.get(), number, &type, &repeat, &width, &status);
        check(status, fmt::format("{}, column {}", table_, number), "a column that can be read");
        Cells cells;
        if (type == TSTRING) {
            cells.kind = Kind::text;
            cells.width = static_cast<std::size_t>(repeat);
        } else if (repeat == 1 && (type == TBYTE || type == TSBYTE || type == TSHORT ||
                                   type == TUSHORT || type == TINT || type == TUINT ||
                                   type == TLONG || type == TULONG || type == TLONGLONG)) {
            cells.kind = Kind::whole;
        } else if (repeat == 1 && (type == TFLOAT || type == TDOUBLE)) {
            cells.kind = Kind::real;
        }
        return cells;
    }

    /// Reads a column of the rows in memory when it is first asked for.
    [[nodiscard]] const Cells& loaded(int column) const {
        Cells& cells = chunk_[static_cast<std::size_t>(column)];
        if (cells.loaded) {
            return cells;
        }
        const LONGLONG count = std::min(chunk_rows_, rows_ - chunk_first_ + 1);
        const auto size = static_cast<std::size_t>(count);
        int status = 0;
        int any_null = 0;
        switch (cells.kind) {
            case Kind::other:
                refuse(column, "arrays or complex numbers", "one number or text a row");
            case Kind::text:
                read_text(column, size, cells, status);
                break;
            case Kind::whole: {
                cells.whole.resize(size);
                LONGLONG null = kNull;
                fits_read_col(file_.get(), TLONGLONG, column + 1, chunk_first_, 1, count, &null,
                              cells.whole.data(), &any_null, &status);
                break;
            }
            case Kind::real: {
                cells.real.resize(size);
                double null = std::numeric_limits<double>::quiet_NaN();
                fits_read_col(file_.get(), TDOUBLE, column + 1, chunk_first_, 1, count, &null,
                              cells.real.data(), &any_null, &status);
                break;
            }
        }
        check(status, fmt::format("{}, rows from {}", table_, chunk_first_), "complete rows");
        cells.loaded = true;
        return cells;
    }

    void read_text(int column, std::size_t count, Cells& cells, int& status) const {
        const std::size_t width = cells.width + 1;
        std::vector<char> characters(count * width);
        std::vector<char*> strings(count);
        for (std::size_t i = 0; i < count; ++i) {
            strings[i] = characters.data() + i * width;
        }
        std::array<char, 1> null{};
        int any_null = 0;
        fits_read_col(file_.get(), TSTRING, column + 1, chunk_first_, 1,
                      static_cast<LONGLONG>(count), null.data(), strings.data(), &any_null,
                      &status);
        cells.text.clear();
        for (const char* string : strings) {
            std::string text = string;
            text.erase(text.find_last_not_of(' ') + 1);
            cells.text.push_back(std::move(text));
        }
    }

    [[noreturn]] void refuse(int column, const std::string& found,
                             const std::string& expected) const {
        throw InputError({path_,
                          fmt::format("{}, column '{}'", table_,
                                      printable(columns_[static_cast<std::size_t>(column)].name)),
                          found, expected, ""});
    }

    std::string path_;
    FitsFile file_;
    std::string table_;  ///< its place, for messages
    int number_ = 0;     ///< of its HDU, the primary being 1
    std::vector<Column> columns_;
    LONGLONG rows_ = 0;
    LONGLONG row_ = 0;  ///< the current one, from 1
    LONGLONG chunk_first_ = 1;
    LONGLONG chunk_rows_ = 1;
    mutable std::vector<Cells> chunk_;
};

}  // namespace

std::unique_ptr<StarRows> read_star_fits(const std::string& path) {
    return std::make_unique<FitsStarRows>(path);
}

}  // namespace straymark::io
