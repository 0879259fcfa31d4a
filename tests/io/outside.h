#pragma once

#include <array>
#include <cstdio>
#include <memory>
#include <string>
#include <sys/wait.h>

/// Outside judges of the files written here: the standard verifier and astropy, both as Debian
/// packages (config/debian-packages.txt).

namespace straymark::test {

/// How a command ended and all that it printed.
struct CommandResult {
    int status = -1;
    std::string output;
};

inline CommandResult run_command(const std::string& command) {
    CommandResult result;
    std::FILE* pipe = ::popen((command + " 2>&1").c_str(), "r");
    if (pipe == nullptr) {
        return result;
    }
    std::array<char, 4096> part{};
    while (const std::size_t got = std::fread(part.data(), 1, part.size(), pipe)) {
        result.output.append(part.data(), got);
    }
    const int status = ::pclose(pipe);
    result.status = WIFEXITED(status) ? WEXITSTATUS(status) : -1;
    return result;
}

/// Paths here come from ScratchFolder and hold no quote.
inline std::string quoted(const std::string& path) {
    return "'" + path + "'";
}

inline CommandResult verify(const std::string& path) {
    return run_command("fitsverify " + quoted(path));
}
inline constexpr const char* kNoFault = "Verification found 0 warning(s) and 0 error(s)";

/// A script of tests/io under Debian's own Python, which sees Debian's astropy.
inline CommandResult run_script(const std::string& script, const std::string& arguments) {
    return run_command("/usr/bin/python3 -W error " +
                       quoted(std::string(STRAYMARK_TEST_DATA) + "/io/" + script) + " " +
                       arguments);
}

}  // namespace straymark::test
