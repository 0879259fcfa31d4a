#pragma once

#include <CLI/CLI.hpp>
#include <functional>
#include <string>
#include <thread>

#include "core/value.h"

/// The command line's own small frame: one file a command, each adding itself with one function.

namespace straymark::cli {

enum ExitStatus : int { kDone = 0, kFailed = 1, kWrongUse = 2, kIncomplete = 3 };

/// Options every command shares, and the command that was chosen.
struct CommandLine {
    CLI::App app;
    std::string site;
    bool json = false;
    bool quiet = false;
    int threads = static_cast<int>(std::max(1U, std::thread::hardware_concurrency()));
    std::function<int()> run;  ///< returns the exit status; set by the chosen subcommand

    /// A subcommand with --json, --quiet and --threads; `example` ends its help.
    CLI::App* add(const std::string& name, const std::string& description,
                  const std::string& example, std::function<int()> body,
                  CLI::App* parent = nullptr);
    /// Adds --site (required).
    void add_site(CLI::App* command);
};

/// Prints the machine-readable result on standard output when --json was given.
void print_json(const CommandLine& line, const Value& result);
/// A line on standard output for people: nothing under --json or --quiet.
void say(const CommandLine& line, const std::string& text);
/// A warning or error on standard error, always.
void complain(const std::string& text);

/// A bar on standard error, only when that is a terminal and neither --quiet nor --json was given.
class Progress {
public:
    Progress(const CommandLine& line, std::string label, int total);
    ~Progress();
    Progress(const Progress&) = delete;
    Progress& operator=(const Progress&) = delete;
    void advance(int done);  ///< thread-safe

private:
    std::string label_;
    int total_;
    bool shown_;
};

void add_check(CommandLine& line);
void add_stars(CommandLine& line);
void add_build(CommandLine& line);
void add_simulate(CommandLine& line);
void add_score(CommandLine& line);

}  // namespace straymark::cli
