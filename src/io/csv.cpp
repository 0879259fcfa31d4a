#include "io/csv.h"

#include <algorithm>
#include <charconv>
#include <cmath>
#include <fmt/format.h>
#include <span>

#include "core/error.h"
#include "io/files.h"

namespace straymark::io {
namespace {

constexpr std::size_t kLongestLine = 65536;

std::string_view trimmed(std::string_view text) {
    const auto space = [](char c) { return c == ' ' || c == '\t' || c == '\r' || c == '\n'; };
    while (!text.empty() && space(text.front())) {
        text.remove_prefix(1);
    }
    while (!text.empty() && space(text.back())) {
        text.remove_suffix(1);
    }
    return text;
}

}  // namespace

CsvReader::CsvReader(const std::string& path) : path_(path), file_(path) {
    if (!read_line()) {
        throw InputError({path_, "", "no header row", "a first line that names the columns", ""});
    }
    split();
    columns_ = fields_;
    for (std::size_t i = 0; i < columns_.size(); ++i) {
        if (std::find(columns_.begin(), columns_.begin() + static_cast<std::ptrdiff_t>(i),
                      columns_[i]) != columns_.begin() + static_cast<std::ptrdiff_t>(i)) {
            throw InputError({path_, fmt::format("line {}", line_),
                              fmt::format("column '{}' twice", columns_[i]), "each name once", ""});
        }
    }
}

CsvReader::~CsvReader() = default;
CsvReader::CsvReader(CsvReader&&) noexcept = default;
CsvReader& CsvReader::operator=(CsvReader&&) noexcept = default;

std::optional<int> CsvReader::column(std::string_view name) const {
    const auto found = std::find(columns_.begin(), columns_.end(), name);
    if (found == columns_.end()) {
        return std::nullopt;
    }
    return static_cast<int>(found - columns_.begin());
}

int CsvReader::required_column(std::string_view name) const {
    if (const auto index = column(name)) {
        return *index;
    }
    throw InputError({path_, "header row", fmt::format("columns {}", fmt::join(columns_, ", ")),
                      fmt::format("a column '{}'", name), ""});
}

bool CsvReader::read_text_line() {
    constexpr std::int64_t kBlock = 1 << 16;
    text_.clear();
    for (;;) {
        if (at_ == block_.size()) {
            block_.resize(static_cast<std::size_t>(std::min(kBlock, file_.size() - offset_)));
            at_ = 0;
            if (block_.empty()) {
                return !text_.empty();
            }
            file_.read_at(offset_, std::as_writable_bytes(std::span(block_)));
            offset_ += static_cast<std::int64_t>(block_.size());
        }
        const std::string_view rest(block_.data() + at_, block_.size() - at_);
        const std::string_view part = rest.substr(0, rest.find('\n'));
        const bool ended = part.size() < rest.size();
        text_ += part;
        at_ += part.size() + (ended ? 1 : 0);
        if (text_.size() > kLongestLine) {
            throw InputError({path_, fmt::format("line {}", line_ + 1), "a line over 64 KiB",
                              "comma-separated text", ""});
        }
        if (ended) {
            return true;
        }
    }
}

bool CsvReader::read_line() {
    static constexpr std::string_view kByteOrderMark = "\xEF\xBB\xBF";
    do {
        if (!read_text_line()) {
            return false;
        }
        if (line_ == 0 && text_.starts_with(kByteOrderMark)) {
            text_.erase(0, kByteOrderMark.size());
        }
        ++line_;
        if (text_.find('\0') != std::string::npos) {
            throw InputError({path_, fmt::format("line {}", line_), "a byte of value zero",
                              "comma-separated text", ""});
        }
    } while (trimmed(text_).empty() || text_.front() == '#');
    return true;
}

void CsvReader::split() {
    fields_.clear();
    const std::string_view row = trimmed(text_);
    std::size_t at = 0;
    for (;;) {
        std::string field;
        if (at < row.size() && row[at] == '"') {
            for (++at; at < row.size(); ++at) {
                if (row[at] == '"') {
                    if (at + 1 >= row.size() || row[at + 1] != '"') {
                        break;
                    }
                    ++at;
                }
                field += row[at];
            }
            if (at >= row.size()) {
                throw InputError({path_, fmt::format("line {}", line_),
                                  "a quote that is not closed", "a closing quote on the same line",
                                  ""});
            }
            at = std::min(row.find(',', at), row.size());
        } else {
            const std::size_t end = std::min(row.find(',', at), row.size());
            field = trimmed(row.substr(at, end - at));
            at = end;
        }
        fields_.push_back(std::move(field));
        if (at >= row.size()) {
            return;
        }
        ++at;
    }
}

bool CsvReader::next() {
    if (!read_line()) {
        return false;
    }
    split();
    if (fields_.size() != columns_.size()) {
        throw InputError({path_, fmt::format("line {}", line_),
                          fmt::format("{} fields", fields_.size()),
                          fmt::format("{} as in the header row", columns_.size()), ""});
    }
    return true;
}

std::string_view CsvReader::field(int column) const {
    return fields_[static_cast<std::size_t>(column)];
}

double CsvReader::number(int column) const {
    const std::string_view text = field(column);
    double value = 0.0;
    const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
    if (error != std::errc() || end != text.data() + text.size() || !std::isfinite(value)) {
        refuse(column, "a finite number");
    }
    return value;
}

int CsvReader::integer(int column) const {
    const std::string_view text = field(column);
    int value = 0;
    const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
    if (error != std::errc() || end != text.data() + text.size()) {
        refuse(column, "a whole number");
    }
    return value;
}

void CsvReader::refuse(int column, const std::string& expected) const {
    throw InputError(
        {path_,
         fmt::format("line {}, column '{}'", line_, columns_[static_cast<std::size_t>(column)]),
         fmt::format("'{}'", field(column)), expected, ""});
}

}  // namespace straymark::io
