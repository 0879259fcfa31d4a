#include "cli/command.h"

#include <cstdio>
#include <fmt/core.h>
#include <unistd.h>

#include "io/json.h"

namespace straymark::cli {

CLI::App* CommandLine::add(const std::string& name, const std::string& description,
                           const std::string& example, std::function<int()> body,
                           CLI::App* parent) {
    CLI::App* command = (parent != nullptr ? parent : &app)->add_subcommand(name, description);
    command->footer("Example:\n  " + example);
    command->add_flag("--json", json, "print the result as JSON on standard output");
    command->add_flag("--quiet", quiet, "print nothing but warnings and errors");
    command->add_option("--threads", threads, "threads to use (default: all cores)")
        ->check(CLI::Range(1, 1024));
    command->callback([this, body = std::move(body)] { run = body; });
    return command;
}

void CommandLine::add_site(CLI::App* command) {
    command->add_option("--site", site, "site file: camera, calibrations, star list, masks")
        ->required();
}

void print_json(const CommandLine& line, const Value& result) {
    if (line.json) {
        fmt::print("{}\n", io::to_json(result));
    }
}

void say(const CommandLine& line, const std::string& text) {
    if (!line.json && !line.quiet) {
        fmt::print("{}\n", text);
    }
}

void complain(const std::string& text) {
    fmt::print(stderr, "straymark: {}\n", text);
}

Progress::Progress(const CommandLine& line, std::string label, int total)
    : label_(std::move(label)),
      total_(total),
      shown_(!line.quiet && !line.json && isatty(fileno(stderr)) == 1) {}

Progress::~Progress() {
    if (shown_) {
        fmt::print(stderr, "\r\033[K");
    }
}

void Progress::advance(int done) {
    if (!shown_ || total_ <= 0) {
        return;
    }
    constexpr int kWidth = 30;
    const int filled = kWidth * done / total_;
    fmt::print(stderr, "\r{} [{}{}] {}/{}\033[K", label_, std::string(filled, '='),
               std::string(kWidth - filled, ' '), done, total_);
}

}  // namespace straymark::cli
