#include "sky/wcs.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstring>
#include <mutex>
#include <new>
#include <utility>
#include <wcslib/wcs.h>
#include <wcslib/wcshdr.h>

#include "camera/geometry.h"
#include "core/error.h"
#include "sky/projection.h"
#include "sky/wcs_header.h"

namespace straymark {
namespace {

/// WCSLIB's parser and the functions that allocate share global state.
std::mutex& library_mutex() {
    static std::mutex mutex;
    return mutex;
}

struct Release {
    void operator()(wcsprm* solution) const {
        const std::scoped_lock lock(library_mutex());
        wcsfree(solution);
        delete solution;
    }
};
using Solution = std::unique_ptr<wcsprm, Release>;

/// A deep copy, to be made ready by `ready`. `status`: WCSLIB's, 0 if it succeeded.
Solution copy_of(const wcsprm& original, int& status) {
    Solution copy(new wcsprm{});
    copy->flag = -1;
    const std::scoped_lock lock(library_mutex());
    status = wcscopy(1, &original, copy.get());
    return copy;
}

/// Prepares a solution for use; returns WCSLIB's status.
int ready(wcsprm& solution) {
    const std::scoped_lock lock(library_mutex());
    return wcsset(&solution);
}

/// What wcspih allocates.
class ParsedHeader {
public:
    explicit ParsedHeader(std::string text) {
        const std::scoped_lock lock(library_mutex());
        int rejected = 0;
        constexpr int kSilent = 0;
        status_ = wcspih(text.data(), static_cast<int>(text.size() / 80), WCSHDR_all, kSilent,
                         &rejected, &count_, &solutions_);
    }
    ~ParsedHeader() {
        const std::scoped_lock lock(library_mutex());
        wcsvfree(&count_, &solutions_);
    }
    ParsedHeader(const ParsedHeader&) = delete;
    ParsedHeader& operator=(const ParsedHeader&) = delete;

    [[nodiscard]] const wcsprm* solution() const {
        return status_ == 0 && count_ == 1 ? solutions_ : nullptr;
    }

private:
    int status_ = 0;
    int count_ = 0;
    wcsprm* solutions_ = nullptr;
};

std::string keyword_of(const std::string& card) {
    return card.substr(0, std::min(card.find_first_of(" ="), std::size_t{8}));
}

}  // namespace

struct Wcs::Impl {
    std::vector<std::string> cards;
    Solution original;  ///< as parsed, never evaluated
    int longitude_axis = 0;
    int latitude_axis = 1;

    mutable std::mutex idle_mutex;
    mutable std::vector<Solution> idle;

    /// Lends a solution that no other thread uses: evaluating one writes to its scratch memory.
    class Loan {
    public:
        explicit Loan(const Impl& owner) : owner_(owner) {
            {
                const std::scoped_lock lock(owner_.idle_mutex);
                if (!owner_.idle.empty()) {
                    solution_ = std::move(owner_.idle.back());
                    owner_.idle.pop_back();
                    return;
                }
            }
            int status = 0;
            solution_ = copy_of(*owner_.original, status);
            if (status != 0 || ready(*solution_) != 0) {
                throw std::bad_alloc();  // it succeeded once, on construction
            }
        }
        ~Loan() {
            const std::scoped_lock lock(owner_.idle_mutex);
            owner_.idle.push_back(std::move(solution_));
        }
        Loan(const Loan&) = delete;
        Loan& operator=(const Loan&) = delete;
        [[nodiscard]] wcsprm* get() const { return solution_.get(); }

    private:
        const Impl& owner_;
        Solution solution_;
    };
};

Wcs::Wcs(const std::vector<std::string>& cards, const std::string& file, const std::string& place)
    : impl_(std::make_unique<Impl>()) {
    std::vector<WcsCard> parsed = parse_wcs_cards(cards, file, place);
    settle_conventions(parsed, file, place);
    std::string header;
    for (const WcsCard& card : parsed) {
        impl_->cards.push_back(fits_card(card));
        header += impl_->cards.back();
    }
    const auto refuse = [&](const std::string& found) {
        throw InputError({file, place, found, "a coordinate system that can be inverted",
                          "correct the WCS cards, or remove them from the header"});
    };
    const ParsedHeader library(std::move(header));
    if (library.solution() == nullptr) {
        refuse("WCS cards that make no coordinate system");
    }
    int status = 0;
    impl_->original = copy_of(*library.solution(), status);
    Solution first = copy_of(*library.solution(), status);
    status = status == 0 ? ready(*first) : status;
    if (status != 0) {
        refuse(wcs_errmsg[status]);
    }
    impl_->longitude_axis = first->lng;
    impl_->latitude_axis = first->lat;
    if (first->naxis != 2 || first->lng < 0 || first->lat < 0) {
        refuse("axes that are not right ascension and declination");
    }
    impl_->idle.push_back(std::move(first));
}

Wcs::~Wcs() = default;
Wcs::Wcs(Wcs&&) noexcept = default;
Wcs& Wcs::operator=(Wcs&&) noexcept = default;

bool Wcs::present(const std::vector<std::string>& cards) {
    const auto has = [&cards](const char* keyword) {
        return std::any_of(cards.begin(), cards.end(), [keyword](const std::string& card) {
            return keyword_of(card) == keyword;
        });
    };
    return has("CTYPE1") && has("CTYPE2");
}

SkyPoint Wcs::sky_from_detector(DetectorPoint point) const {
    const std::array<double, 2> pixel{point.x_px + 1.0, point.y_px + 1.0};
    std::array<double, 2> intermediate{};
    std::array<double, 2> world{};
    double native_longitude = 0.0;
    double native_latitude = 0.0;
    int status = 0;
    const Impl::Loan loan(*impl_);
    wcsp2s(loan.get(), 1, 2, pixel.data(), intermediate.data(), &native_longitude, &native_latitude,
           world.data(), &status);
    const double ra = std::fmod(world[static_cast<std::size_t>(impl_->longitude_axis)], 360.0);
    return {ra < 0.0 ? ra + 360.0 : ra, world[static_cast<std::size_t>(impl_->latitude_axis)]};
}

std::optional<DetectorPoint> Wcs::detector_from_sky(SkyPoint point) const {
    std::array<double, 2> world{};
    world[static_cast<std::size_t>(impl_->longitude_axis)] = point.ra_deg;
    world[static_cast<std::size_t>(impl_->latitude_axis)] = point.dec_deg;
    std::array<double, 2> intermediate{};
    std::array<double, 2> pixel{};
    double native_longitude = 0.0;
    double native_latitude = 0.0;
    int point_status = 0;
    const Impl::Loan loan(*impl_);
    const int status = wcss2p(loan.get(), 1, 2, world.data(), &native_longitude, &native_latitude,
                              intermediate.data(), pixel.data(), &point_status);
    if (status != 0 || point_status != 0 || !std::isfinite(pixel[0]) || !std::isfinite(pixel[1])) {
        return std::nullopt;
    }
    return DetectorPoint{pixel[0] - 1.0, pixel[1] - 1.0};
}

const std::vector<std::string>& Wcs::cards() const {
    return impl_->cards;
}

}  // namespace straymark
