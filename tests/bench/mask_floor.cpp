// The floor that `straymark build` is compared with: what a plain program on CFITSIO needs to read
// the same pixels and to write the same mask, doing nothing in between.
//
//   mask_floor RAW MASK OUT
//
// RAW: a multi-extension file, an image for each amplifier; MASK: a mask file of straymark, read
// before the clock starts; OUT: written. Prints three numbers and nothing else: seconds to read,
// to write (RICE_1 tiles, CHECKSUM and DATASUM, fsync), and in all.

#include <array>
#include <chrono>
#include <cstdint>
#include <cstdio>
#include <cstdlib>
#include <fcntl.h>
#include <fitsio.h>
#include <string>
#include <unistd.h>
#include <vector>

namespace {

void check(int status) {
    if (status != 0) {
        fits_report_error(stderr, status);
        std::exit(1);
    }
}

struct Image {
    std::string name;
    std::array<long, 2> size{};
    std::vector<std::int16_t> pixels;
};

/// Calls `use(file)` at each unit that holds an image of two axes.
template <typename Use>
void for_each_image(const char* path, Use use) {
    fitsfile* file = nullptr;
    int status = 0;
    int units = 0;
    fits_open_diskfile(&file, path, READONLY, &status);
    fits_get_num_hdus(file, &units, &status);
    check(status);
    for (int unit = 1; unit <= units; ++unit) {
        int kind = 0;
        int axes = 0;
        fits_movabs_hdu(file, unit, &kind, &status);
        if (kind == IMAGE_HDU) {
            fits_get_img_dim(file, &axes, &status);
        }
        check(status);
        if (axes == 2) {
            use(file);
        }
    }
    fits_close_file(file, &status);
    check(status);
}

std::vector<Image> read_masks(const char* path) {
    std::vector<Image> images;
    for_each_image(path, [&images](fitsfile* file) {
        int status = 0;
        Image& image = images.emplace_back();
        std::array<char, FLEN_VALUE> name{};
        fits_read_key(file, TSTRING, "EXTNAME", name.data(), nullptr, &status);
        fits_get_img_size(file, 2, image.size.data(), &status);
        check(status);
        image.name = name.data();
        image.pixels.resize(static_cast<std::size_t>(image.size[0] * image.size[1]));
        fits_read_img(file, TSHORT, 1, static_cast<LONGLONG>(image.pixels.size()), nullptr,
                      image.pixels.data(), nullptr, &status);
        check(status);
    });
    return images;
}

void read_pixels(const char* path, std::vector<float>& buffer) {
    for_each_image(path, [&buffer](fitsfile* file) {
        int status = 0;
        std::array<long, 2> size{};
        fits_get_img_size(file, 2, size.data(), &status);
        check(status);
        const auto count = static_cast<std::size_t>(size[0] * size[1]);
        if (buffer.size() < count) {
            buffer.resize(count);
        }
        fits_read_img(file, TFLOAT, 1, static_cast<LONGLONG>(count), nullptr, buffer.data(),
                      nullptr, &status);
        check(status);
    });
}

void write_masks(const char* path, std::vector<Image>& images) {
    fitsfile* file = nullptr;
    int status = 0;
    ::unlink(path);
    fits_create_diskfile(&file, path, &status);
    fits_create_img(file, BYTE_IMG, 0, nullptr, &status);
    fits_write_chksum(file, &status);
    for (Image& image : images) {
        fits_set_compression_type(file, RICE_1, &status);
        fits_create_img(file, SHORT_IMG, 2, image.size.data(), &status);
        fits_update_key(file, TSTRING, "EXTNAME", image.name.data(), nullptr, &status);
        fits_write_img(file, TSHORT, 1, static_cast<LONGLONG>(image.pixels.size()),
                       image.pixels.data(), &status);
        fits_write_chksum(file, &status);
    }
    fits_close_file(file, &status);
    check(status);
    const int descriptor = ::open(path, O_RDONLY | O_CLOEXEC);
    if (descriptor < 0 || ::fsync(descriptor) != 0 || ::close(descriptor) != 0) {
        std::perror(path);
        std::exit(1);
    }
}

}  // namespace

int main(int argc, char** argv) {
    if (argc != 4) {
        std::fputs("usage: mask_floor RAW MASK OUT\n", stderr);
        return 2;
    }
    std::vector<Image> masks = read_masks(argv[2]);
    std::vector<float> buffer;
    using Clock = std::chrono::steady_clock;
    const auto start = Clock::now();
    read_pixels(argv[1], buffer);
    const auto read = Clock::now();
    write_masks(argv[3], masks);
    const auto end = Clock::now();
    const auto seconds = [](Clock::duration time) {
        return std::chrono::duration<double>(time).count();
    };
    std::printf("%.6f %.6f %.6f\n", seconds(read - start), seconds(end - read),
                seconds(end - start));
    return 0;
}
