#include "io/calibration_store.h"

#include <algorithm>
#include <filesystem>
#include <fmt/format.h>
#include <system_error>
#include <utility>

#include "core/error.h"

namespace straymark::io {
namespace {

std::vector<std::string> product_paths(const std::string& folder) {
    std::error_code error;
    std::vector<std::string> paths;
    for (std::filesystem::directory_iterator at(folder, error), end; !error && at != end;
         at.increment(error)) {
        const std::filesystem::path& path = at->path();
        const bool hidden = path.filename().string().starts_with('.');
        if (!hidden && (path.extension() == ".fits" || path.extension() == ".json")) {
            paths.push_back(path.string());
        }
    }
    if (error) {
        throw InputError({folder, "", error.message(), "a folder of calibration products",
                          "check `calibrations` in the site file"});
    }
    std::sort(paths.begin(), paths.end());
    return paths;
}

bool serves(const std::string& product, const std::string& exposure) {
    return product.empty() || product == exposure;
}

bool in_force_for(const Product& product, const Camera& camera, const ExposureHeader& header) {
    return product.camera == camera.name && serves(product.mode, header.mode) &&
           serves(product.filter, header.filter) && product.valid_from.days <= header.start.days &&
           header.start.days < product.valid_to.days;
}

}  // namespace

/// What a look at one file gave.
struct CalibrationFolder::Entry {
    std::uintmax_t size = 0;
    std::filesystem::file_time_type changed;
    std::optional<std::string> kind;  // nothing: it could be any
    std::optional<Product> product;   // nothing: could not be read
    std::optional<InputError> error;  // why
};

CalibrationFolder::CalibrationFolder(std::string folder) : folder_(std::move(folder)) {}

std::shared_ptr<const CalibrationFolder::Entry> CalibrationFolder::entry_of(
    const std::string& path) const {
    auto entry = std::make_shared<Entry>();
    std::error_code ignored;  // a file that cannot be asked cannot be opened either
    entry->size = std::filesystem::file_size(path, ignored);
    entry->changed = std::filesystem::last_write_time(path, ignored);
    std::shared_ptr<const Entry>& known = cache_[path];
    if (known && known->size == entry->size && known->changed == entry->changed) {
        return known;
    }
    try {
        entry->kind = product_format(path).kind;
        entry->product = read_product(path);
    } catch (const InputError& error) {
        entry->error = error;
    }
    known = entry;
    return known;
}

std::vector<std::shared_ptr<const CalibrationFolder::Entry>> CalibrationFolder::entries(
    const std::string& kind) const {
    const std::lock_guard lock(mutex_);
    std::vector<std::shared_ptr<const Entry>> found;
    for (const std::string& path : product_paths(folder_)) {
        std::shared_ptr<const Entry> entry = entry_of(path);
        if (entry->kind.value_or(kind) != kind) {
            continue;
        }
        if (entry->error) {
            throw InputError(entry->error->fault());
        }
        found.push_back(std::move(entry));
    }
    return found;
}

std::vector<Product> CalibrationFolder::all(const std::string& kind) const {
    std::vector<Product> products;
    for (const auto& entry : entries(kind)) {
        products.push_back(*entry->product);
    }
    return products;
}

std::optional<Product> CalibrationFolder::in_force(const std::string& kind, const Camera& camera,
                                                   const ExposureHeader& header) const {
    const Product* chosen = nullptr;
    const std::vector<std::shared_ptr<const Entry>> candidates = entries(kind);
    for (const auto& entry : candidates) {
        const Product& product = *entry->product;
        if (!in_force_for(product, camera, header)) {
            continue;
        }
        if (chosen != nullptr) {
            throw InputError({folder_, "",
                              fmt::format("two {} products in force at MJD {}: {} and {}", kind,
                                          header.start.days, chosen->path, product.path),
                              "one for each camera, mode, filter and date",
                              "retire one of them or change its dates"});
        }
        chosen = &product;
    }
    return chosen != nullptr ? std::optional(*chosen) : std::nullopt;
}

}  // namespace straymark::io
