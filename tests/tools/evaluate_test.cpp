// kedge-evaluate as people run it, where the system fails under it.
#include <fmt/core.h>

#include <catch2/catch.hpp>
#include <fstream>

#include "support/program.h"
#include "support/temporary_folder.h"

using namespace kedge;

TEST_CASE("a full disk ends the evaluation with a text, not with an abort") {
  const test::TemporaryFolder folder;
  const std::string messages = folder.file("m.jsonl");
  const std::string truth = folder.file("t.csv");
  std::ofstream truth_file(truth);
  truth_file << "tag,t_s,x_m,y_m\n";
  // So many tags that the table does not fit in the buffer of a stream.
  for (int i = 0; i < 200; ++i) truth_file << fmt::format("cart-{0},0,0,0\ncart-{0},1,0,0\n", i);
  truth_file.close();
  std::ofstream(messages) << R"({"position":{"tag":"cart-1","timeNs":"1","standing":"waking"}})"
                          << "\n";

  const test::Run good = test::run_program("tools/kedge-evaluate", messages + " " + truth);
  CHECK(good.exit_code == 0);
  CHECK(good.output.find("cart-199") != std::string::npos);
  const test::Run full = test::run_program("tools/kedge-evaluate", messages + " " + truth + " >/dev/full");
  CHECK(full.exit_code == 1);
  CHECK(full.output.starts_with("kedge-evaluate: "));
  CHECK(full.output.find("No space left on device") != std::string::npos);
}
