#pragma once

#include <string>
#include <vector>

namespace straymark::io {

/// A table of stars as somebody hands it over, row by row, whatever its format.
class StarRows {
public:
    struct Column {
        std::string name;
        std::string unit;  ///< empty: not stated
    };

    virtual ~StarRows() = default;
    StarRows() = default;
    StarRows(const StarRows&) = delete;
    StarRows& operator=(const StarRows&) = delete;

    [[nodiscard]] virtual const std::vector<Column>& columns() const = 0;
    /// The next row; false at the end. Throws InputError where the table is damaged.
    virtual bool next() = 0;
    /// Where the current row is: "line 3", "HDU 1, row 3".
    [[nodiscard]] virtual std::string place() const = 0;
    /// A number of the current row; NaN where it is null or empty. Throws InputError where it is
    /// something else.
    [[nodiscard]] virtual double number(int column) const = 0;
    /// The text of the current row's cell; whole numbers as decimal digits.
    [[nodiscard]] virtual std::string text(int column) const = 0;
};

}  // namespace straymark::io
