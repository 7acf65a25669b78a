// Runs one of our programs as people do.
#pragma once

#include <sys/wait.h>

#include <array>
#include <catch2/catch.hpp>
#include <cstdio>
#include <string>

namespace kedge::test {

struct Run {
  int exit_code = 0;
  std::string output;  ///< both streams
};

/// `program` as in "tools/kedge-convert"; `arguments` as the shell takes them.
inline Run run_program(const std::string& program, const std::string& arguments) {
  const std::string command = "exec 2>&1; " KEDGE_BINARY_DIR "/" + program + " " + arguments;
  std::FILE* pipe = ::popen(command.c_str(), "r");
  REQUIRE(pipe != nullptr);
  Run run;
  std::array<char, 4096> piece{};
  for (std::size_t got = 0; (got = std::fread(piece.data(), 1, piece.size(), pipe)) > 0;)
    run.output.append(piece.data(), got);
  const int status = ::pclose(pipe);
  REQUIRE(WIFEXITED(status));
  run.exit_code = WEXITSTATUS(status);
  return run;
}

}  // namespace kedge::test
