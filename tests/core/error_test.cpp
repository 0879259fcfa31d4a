#include "core/error.h"

#include <catch2/catch.hpp>
#include <cerrno>
#include <string>

using namespace straymark;

TEST_CASE("a message has file, place, found, expected and advice in that order") {
    const InputError error(
        {"night/a b.fits", "HDU 3, keyword GAIN", "'x'", "a number", "fetch the file again"});
    CHECK(std::string(error.what()) ==
          "night/a b.fits: HDU 3, keyword GAIN: found 'x'; expected a number; "
          "fetch the file again");
    CHECK(error.fault().place == "HDU 3, keyword GAIN");
}

TEST_CASE("empty parts leave no trace in a message") {
    CHECK(std::string(InputError({"a.fits", "", "nothing", "", ""}).what()) ==
          "a.fits: found nothing");
    CHECK(std::string(InputError({"", "line 2", "", "a number", ""}).what()) ==
          "line 2; expected a number");
    CHECK(std::string(InputError({"a.fits", "", "", "", "try again"}).what()) ==
          "a.fits; try again");
}

TEST_CASE("the operating system's refusal names file, action and reason") {
    const SystemError error("masks/a.fits", "write", ENOSPC);
    CHECK(std::string(error.what()) == "masks/a.fits: write: No space left on device");
    CHECK(error.error_number() == ENOSPC);
}
