#include <cerrno>
#include <csignal>
#include <cstdio>
#include <exception>
#include <new>
#include <string_view>

#include "cli/command.h"
#include "core/error.h"
#include "io/fits_isolated.h"

namespace {

using namespace straymark;
using namespace straymark::cli;

int run(int argc, char** argv) {
    CommandLine line;
    line.app.description(
        "Predicts what bright stars leave on the wrong pixels of an exposure, and writes it as "
        "masks.");
    line.app.name("straymark");
    line.app.require_subcommand(1);
    line.app.set_version_flag("--version", "straymark " STRAYMARK_VERSION);
    add_check(line);
    add_stars(line);
    add_build(line);
    add_simulate(line);
    add_score(line);
    try {
        line.app.parse(argc, argv);
    } catch (const CLI::ParseError& error) {
        return line.app.exit(error) == 0 ? kDone : kWrongUse;
    }
    const int status = line.run();
    if (std::fflush(stdout) != 0 || std::ferror(stdout) != 0) {
        throw SystemError("standard output", "write", errno);
    }
    return status;
}

/// A file size limit and a reader that went away are errors of one write, not the end of a night.
void take_signals_as_errors() {
    std::signal(SIGXFSZ, SIG_IGN);
    std::signal(SIGPIPE, SIG_IGN);
}

}  // namespace

int main(int argc, char** argv) {
    take_signals_as_errors();
    try {
        if (argc > 1 && std::string_view(argv[1]) == io::kDecodeArgument) {
            return io::isolated_decode_main(argc, argv);
        }
        return run(argc, argv);
    } catch (const UsageError& error) {
        complain(error.what());
        return kWrongUse;
    } catch (const std::bad_alloc&) {
        complain("out of memory");
        return kFailed;
    } catch (const std::exception& error) {
        complain(error.what());
        return kFailed;
    }
}
