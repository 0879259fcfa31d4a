#pragma once

#include <array>
#include <catch2/catch.hpp>
#include <cstdint>
#include <fitsio.h>
#include <string>
#include <vector>

/// Writes FITS files by CFITSIO alone, so that readers are tested on files of another hand.

namespace straymark::test {

class OutsideFits {
public:
    explicit OutsideFits(const std::string& path) {
        fits_create_diskfile(&file_, path.c_str(), &status_);
        fits_create_img(file_, BYTE_IMG, 0, nullptr, &status_);
    }
    OutsideFits(const OutsideFits&) = delete;
    OutsideFits& operator=(const OutsideFits&) = delete;
    ~OutsideFits() { close(); }

    void text_key(const std::string& keyword, const std::string& value) {
        std::string copy = value;
        fits_update_key(file_, TSTRING, keyword.c_str(), copy.data(), nullptr, &status_);
    }
    /// compression: 0 or one of CFITSIO's (GZIP_2, RICE_1, ...).
    template <typename Pixel>
    void image(const std::string& name, int width, int height, std::vector<Pixel> pixels,
               int compression = 0) {
        constexpr bool kIsFloat = std::is_same_v<Pixel, float>;
        constexpr int kBits = kIsFloat ? FLOAT_IMG : (sizeof(Pixel) == 2 ? SHORT_IMG : LONG_IMG);
        constexpr int kType = kIsFloat ? TFLOAT : (sizeof(Pixel) == 2 ? TSHORT : TINT);
        finish_unit();
        std::array<long, 2> size = {width, height};
        fits_set_compression_type(file_, compression, &status_);
        fits_create_img(file_, kBits, 2, size.data(), &status_);
        text_key("EXTNAME", name);
        fits_write_img(file_, kType, 1, static_cast<LONGLONG>(pixels.size()), pixels.data(),
                       &status_);
    }
    void table(const std::string& name) {
        finish_unit();
        fits_create_tbl(file_, BINARY_TBL, 0, 0, nullptr, nullptr, nullptr, name.c_str(), &status_);
    }
    void column(const std::string& name, const std::vector<double>& cells) {
        add_column(name, "1D");
        std::vector<double> copy = cells;
        fits_write_col(file_, TDOUBLE, columns_, 1, 1, static_cast<LONGLONG>(cells.size()),
                       copy.data(), &status_);
    }
    void column(const std::string& name, const std::vector<int>& cells) {
        add_column(name, "1J");
        std::vector<int> copy = cells;
        fits_write_col(file_, TINT, columns_, 1, 1, static_cast<LONGLONG>(cells.size()),
                       copy.data(), &status_);
    }
    void column(const std::string& name, const std::vector<std::string>& cells) {
        add_column(name, "40A");
        for (std::size_t i = 0; i < cells.size(); ++i) {
            std::string copy = cells[i];
            char* text = copy.data();
            fits_write_col(file_, TSTRING, columns_, static_cast<LONGLONG>(i) + 1, 1, 1, &text,
                           &status_);
        }
    }
    void close() {
        if (file_ != nullptr) {
            finish_unit();
            fits_close_file(file_, &status_);
            file_ = nullptr;
            CHECK(status_ == 0);
        }
    }

private:
    void add_column(const std::string& name, const std::string& format) {
        std::string type = name;
        std::string form = format;
        fits_insert_col(file_, ++columns_, type.data(), form.data(), &status_);
    }
    void finish_unit() {
        fits_write_chksum(file_, &status_);
        columns_ = 0;
    }

    fitsfile* file_ = nullptr;
    int status_ = 0;
    int columns_ = 0;
};

}  // namespace straymark::test
