#pragma once

#include <stdexcept>
#include <string>

namespace straymark {

/// What was wrong with something a user handed over, in the five parts every message has.
/// Empty parts are left out of the message.
struct InputFault {
    std::string file;      ///< path as the user gave it
    std::string place;     ///< HDU, keyword, "line 3, column 5", table row
    std::string found;     ///< what is there
    std::string expected;  ///< what should be there
    std::string advice;    ///< what to do, as one sentence
};

/// Bad input. Thrown where the fault is seen, caught once for each exposure in `night/` and once in
/// `main`; never used for a broken invariant (assert) or an expected outcome (a value).
class InputError : public std::runtime_error {
public:
    explicit InputError(InputFault fault);
    [[nodiscard]] const InputFault& fault() const noexcept { return fault_; }

private:
    InputFault fault_;
};

/// The operating system refused (disk full, permission): not the user's data, not our bug.
class SystemError : public std::runtime_error {
public:
    /// message: "FILE: ACTION: strerror(error_number)"
    SystemError(const std::string& file, const std::string& action, int error_number);
    [[nodiscard]] int error_number() const noexcept { return error_number_; }

private:
    int error_number_;
};

/// The command line asks for something that does not exist or does not fit: exit status 2.
class UsageError : public std::runtime_error {
public:
    using std::runtime_error::runtime_error;
};

}  // namespace straymark
