#include "io/star_csv.h"

#include <charconv>
#include <fmt/format.h>
#include <limits>

#include "io/csv.h"

namespace straymark::io {
namespace {

class CsvStarRows final : public StarRows {
public:
    explicit CsvStarRows(const std::string& path) : reader_(path) {
        for (const std::string& name : reader_.columns()) {
            columns_.push_back({name, ""});
        }
    }
    [[nodiscard]] const std::vector<Column>& columns() const override { return columns_; }
    bool next() override { return reader_.next(); }
    [[nodiscard]] std::string place() const override {
        return fmt::format("line {}", reader_.line());
    }
    [[nodiscard]] double number(int column) const override {
        const std::string_view text = reader_.field(column);
        if (text.empty()) {
            return std::numeric_limits<double>::quiet_NaN();
        }
        double value = 0.0;
        const char* const begin = text.data() + (text.front() == '+' ? 1 : 0);
        const char* const end = text.data() + text.size();
        const auto [stopped, error] = std::from_chars(begin, end, value);
        if (error != std::errc() || stopped != end) {
            reader_.refuse(column, "a number, or nothing");
        }
        return value;
    }
    [[nodiscard]] std::string text(int column) const override {
        return std::string(reader_.field(column));
    }

private:
    CsvReader reader_;
    std::vector<Column> columns_;
};

}  // namespace

std::unique_ptr<StarRows> read_star_csv(const std::string& path) {
    return std::make_unique<CsvStarRows>(path);
}

}  // namespace straymark::io
