#include "io/star_votable.h"

#include <algorithm>
#include <charconv>
#include <cstdint>
#include <deque>
#include <exception>
#include <expat.h>
#include <fmt/format.h>
#include <limits>
#include <map>
#include <optional>
#include <string_view>
#include <utility>

#include "core/error.h"
#include "io/files.h"
#include "io/fits_cards.h"
#include "io/votable_cells.h"

namespace straymark::io {
namespace {

constexpr int kDeepest = 64;
constexpr std::size_t kMostFields = 1000;
constexpr std::size_t kLongestText = 65536;
constexpr std::size_t kLongestRow = 1U << 20U;

/// Element name without a namespace prefix.
std::string_view local_name(std::string_view name) {
    const std::size_t colon = name.rfind(':');
    return colon == std::string_view::npos ? name : name.substr(colon + 1);
}

/// Turns the events of an XML parser into rows. Methods throw; the parser's callbacks below catch.
class VotableDocument {
public:
    explicit VotableDocument(const std::string& path) : path_(path) {}

    std::vector<VotableField> fields;
    std::deque<std::vector<VotableCell>> rows;  ///< complete, not yet handed on
    bool data_begun = false;
    bool table_ended = false;

    void start(std::string_view name, const XML_Char** attributes) {
        if (++depth_ > kDeepest) {
            refuse("elements nested deeper than 64", "a VOTable");
        }
        if (table_ended) {
            return;
        }
        if (name == "FIELD") {
            add_field(attributes);
        } else if (name == "VALUES" && !data_begun && !fields.empty()) {
            fields.back().null = attribute(attributes, "null");
        } else if (name == "TABLEDATA" || name == "BINARY" || name == "BINARY2") {
            data_begun = true;
            if (name != "TABLEDATA") {
                decoder_.emplace(fields, name == "BINARY2");
                if (!decoder_->usable()) {
                    refuse("a FIELD of unknown datatype", "the datatypes of VOTable 1.4");
                }
            }
        } else if (name == "FITS") {
            refuse("a FITS stream inside a VOTable", "TABLEDATA, BINARY or BINARY2");
        } else if (name == "STREAM") {
            start_stream(attributes);
        } else if (name == "TR") {
            row_.clear();
        } else if (name == "TD") {
            in_cell_ = true;
            text_.clear();
        }
    }

    void end(std::string_view name) {
        --depth_;
        if (table_ended) {
            return;
        }
        if (name == "TD") {
            in_cell_ = false;
            row_.push_back({trimmed_text(), std::nullopt});
        } else if (name == "TR") {
            ++row_count_;
            if (row_.size() != fields.size()) {
                refuse(fmt::format("{} cells in row {}", row_.size(), row_count_),
                       fmt::format("{}, one for each FIELD", fields.size()));
            }
            rows.push_back(row_);
        } else if (name == "STREAM") {
            in_stream_ = false;
            if (!bytes_.empty()) {
                refuse(fmt::format("{} bytes after row {}", bytes_.size(), row_count_),
                       "complete rows");
            }
        } else if (name == "TABLE") {
            table_ended = true;
        }
    }

    void characters(std::string_view text) {
        if (in_cell_) {
            text_ += text;
            if (text_.size() > kLongestText) {
                refuse("a cell over 64 KiB", "a table of stars");
            }
        } else if (in_stream_) {
            if (!base64_.decode(text, bytes_)) {
                refuse("characters that are not base64", "a base64 stream");
            }
            cut_rows();
        }
    }

    [[noreturn]] void refuse(const std::string& found, const std::string& expected) const {
        throw InputError({path_, place_, found, expected, ""});
    }
    void set_line(unsigned long line) { place_ = fmt::format("line {}", line); }

private:
    static std::string attribute(const XML_Char** attributes, std::string_view wanted) {
        for (; *attributes != nullptr; attributes += 2) {
            if (local_name(attributes[0]) == wanted) {
                return attributes[1];
            }
        }
        return {};
    }

    void add_field(const XML_Char** attributes) {
        VotableField field;
        field.name = attribute(attributes, "name");
        if (field.name.empty()) {
            field.name = attribute(attributes, "ID");
        }
        field.unit = attribute(attributes, "unit");
        field.datatype = attribute(attributes, "datatype");
        if (!parse_array_size(attribute(attributes, "arraysize"), field.elements)) {
            refuse(fmt::format("arraysize '{}'", printable(attribute(attributes, "arraysize"))),
                   "a size as in VOTable 1.4, at most 65536");
        }
        if (data_begun || fields.size() >= kMostFields) {
            refuse("a FIELD out of place", "at most 1000, before the data");
        }
        fields.push_back(std::move(field));
    }

    void start_stream(const XML_Char** attributes) {
        if (!attribute(attributes, "href").empty()) {
            refuse("a stream kept elsewhere", "data inside the document");
        }
        if (!decoder_ || attribute(attributes, "encoding") != "base64") {
            refuse(fmt::format("encoding '{}'", printable(attribute(attributes, "encoding"))),
                   "base64");
        }
        in_stream_ = true;
    }

    void cut_rows() {
        std::size_t at = 0;
        std::size_t used = 0;
        for (;;) {
            const auto left = std::span<const std::byte>(bytes_).subspan(at);
            const auto outcome = left.empty() ? VotableRowDecoder::Outcome::incomplete
                                              : decoder_->take(left, row_, used);
            if (outcome == VotableRowDecoder::Outcome::damaged || left.size() > kLongestRow) {
                refuse(fmt::format("a damaged row {}", row_count_ + 1), "rows as the FIELDs say");
            }
            if (outcome == VotableRowDecoder::Outcome::incomplete) {
                break;
            }
            if (used == 0) {
                refuse("rows without bytes", "at least one FIELD");
            }
            ++row_count_;
            rows.push_back(row_);
            at += used;
        }
        bytes_.erase(bytes_.begin(), bytes_.begin() + static_cast<std::ptrdiff_t>(at));
    }

    [[nodiscard]] std::string trimmed_text() const {
        constexpr std::string_view kBlank = " \t\r\n";
        const std::size_t first = text_.find_first_not_of(kBlank);
        if (first == std::string::npos) {
            return {};
        }
        return text_.substr(first, text_.find_last_not_of(kBlank) - first + 1);
    }

    const std::string& path_;
    std::string place_;
    int depth_ = 0;
    bool in_cell_ = false;
    bool in_stream_ = false;
    std::string text_;
    std::vector<VotableCell> row_;
    std::int64_t row_count_ = 0;
    Base64Decoder base64_;
    std::vector<std::byte> bytes_;
    std::optional<VotableRowDecoder> decoder_;
};

struct FreeParser {
    void operator()(XML_Parser parser) const { XML_ParserFree(parser); }
};
using Parser = std::unique_ptr<std::remove_pointer_t<XML_Parser>, FreeParser>;

/// Feeds a document to the parser and carries exceptions past it: they must not pass through C.
class VotableStream {
public:
    explicit VotableStream(const std::string& path)
        : document(path), path_(path), file_(path), parser_(XML_ParserCreate(nullptr)) {
        if (!parser_) {
            throw std::bad_alloc();
        }
        XML_SetUserData(parser_.get(), this);
        XML_SetElementHandler(parser_.get(), &on_start, &on_end);
        XML_SetCharacterDataHandler(parser_.get(), &on_characters);
        XML_SetEntityDeclHandler(parser_.get(), &on_entity);
    }

    VotableDocument document;

    /// Parses one more piece; false at the end of the file.
    bool advance() {
        if (offset_ >= file_.size()) {
            return false;
        }
        const std::int64_t length = std::min(kPiece, file_.size() - offset_);
        buffer_.resize(static_cast<std::size_t>(length));
        file_.read_at(offset_, std::as_writable_bytes(std::span(buffer_)));
        offset_ += length;
        const bool last = offset_ >= file_.size();
        const XML_Status status = XML_Parse(parser_.get(), buffer_.data(), static_cast<int>(length),
                                            last ? XML_TRUE : XML_FALSE);
        if (failure_) {
            std::rethrow_exception(failure_);
        }
        if (status == XML_STATUS_ERROR) {
            throw InputError({path_,
                              fmt::format("line {}", XML_GetCurrentLineNumber(parser_.get())),
                              XML_ErrorString(XML_GetErrorCode(parser_.get())), "well-formed XML",
                              "the file may be damaged or truncated"});
        }
        return true;
    }

private:
    static constexpr std::int64_t kPiece = 1 << 16;

    template <typename Action>
    static void guarded(void* self, Action action) {
        auto& stream = *static_cast<VotableStream*>(self);
        if (stream.failure_) {
            return;
        }
        try {
            stream.document.set_line(XML_GetCurrentLineNumber(stream.parser_.get()));
            action(stream.document);
        } catch (...) {
            stream.failure_ = std::current_exception();
            XML_StopParser(stream.parser_.get(), XML_FALSE);
        }
    }
    static void on_start(void* self, const XML_Char* name, const XML_Char** attributes) {
        guarded(self,
                [&](VotableDocument& document) { document.start(local_name(name), attributes); });
    }
    static void on_end(void* self, const XML_Char* name) {
        guarded(self, [&](VotableDocument& document) { document.end(local_name(name)); });
    }
    static void on_characters(void* self, const XML_Char* text, int length) {
        guarded(self, [&](VotableDocument& document) {
            document.characters({text, static_cast<std::size_t>(length)});
        });
    }
    static void on_entity(void* self, const XML_Char* /*name*/, int /*is_parameter*/,
                          const XML_Char* /*value*/, int /*length*/, const XML_Char* /*base*/,
                          const XML_Char* /*system*/, const XML_Char* /*public_id*/,
                          const XML_Char* /*notation*/) {
        guarded(self, [](VotableDocument& document) {
            document.refuse("an entity declaration", "a VOTable without a DTD of its own");
        });
    }

    const std::string& path_;
    InputFile file_;
    Parser parser_;
    std::int64_t offset_ = 0;
    std::string buffer_;
    std::exception_ptr failure_;
};

class VotableStarRows final : public StarRows {
public:
    explicit VotableStarRows(const std::string& path) : path_(path), stream_(path_) {
        while (!stream_.document.data_begun && stream_.advance()) {
        }
        if (!stream_.document.data_begun) {
            throw InputError(
                {path_, "", "no TABLEDATA, BINARY or BINARY2", "a VOTable with a table", ""});
        }
        for (const VotableField& field : stream_.document.fields) {
            columns_.push_back({field.name, field.unit});
        }
    }

    [[nodiscard]] const std::vector<Column>& columns() const override { return columns_; }

    bool next() override {
        auto& rows = stream_.document.rows;
        while (rows.empty() && !stream_.document.table_ended && stream_.advance()) {
        }
        if (rows.empty()) {
            return false;
        }
        row_ = std::move(rows.front());
        rows.pop_front();
        ++number_;
        return true;
    }

    [[nodiscard]] std::string place() const override { return fmt::format("row {}", number_); }

    [[nodiscard]] double number(int column) const override {
        const VotableCell& cell = row_[static_cast<std::size_t>(column)];
        const VotableField& field = stream_.document.fields[static_cast<std::size_t>(column)];
        const bool null = cell.text.empty() || cell.text == field.null;
        if (cell.number && (cell.text.empty() || !null)) {
            return *cell.number;
        }
        if (null) {
            return std::numeric_limits<double>::quiet_NaN();
        }
        const std::string_view text = cell.text;
        double value = 0.0;
        const char* const begin = text.data() + (text.front() == '+' ? 1 : 0);
        const auto [stopped, error] = std::from_chars(begin, text.data() + text.size(), value);
        if (error != std::errc() || stopped != text.data() + text.size()) {
            throw InputError({path_, fmt::format("{}, column '{}'", place(), printable(field.name)),
                              fmt::format("'{}'", printable(text)), "a number, or nothing", ""});
        }
        return value;
    }

    [[nodiscard]] std::string text(int column) const override {
        return row_[static_cast<std::size_t>(column)].text;
    }

private:
    std::string path_;
    VotableStream stream_;
    std::vector<Column> columns_;
    std::vector<VotableCell> row_;
    std::int64_t number_ = 0;
};

}  // namespace

std::unique_ptr<StarRows> read_star_votable(const std::string& path) {
    return std::make_unique<VotableStarRows>(path);
}

}  // namespace straymark::io
