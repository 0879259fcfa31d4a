#include "core/error.h"

#include <system_error>

namespace straymark {
namespace {

std::string message_of(const InputFault& fault) {
    std::string text = fault.file;
    const auto append = [&text](const char* before, const std::string& part) {
        if (part.empty()) {
            return;
        }
        if (!text.empty()) {
            text += before;
        }
        text += part;
    };
    append(": ", fault.place);
    append(": found ", fault.found);
    append("; expected ", fault.expected);
    append("; ", fault.advice);
    return text;
}

}  // namespace

InputError::InputError(InputFault fault)
    : std::runtime_error(message_of(fault)), fault_(std::move(fault)) {}

SystemError::SystemError(const std::string& file, const std::string& action, int error_number)
    : std::runtime_error(file + ": " + action + ": " +
                         std::generic_category().message(error_number)),
      error_number_(error_number) {}

}  // namespace straymark
