// The floors: who may include whom. Reads the #include lines and the tree; fails by naming the
// line.

#include <gtest/gtest.h>

#include <algorithm>
#include <filesystem>
#include <fstream>
#include <map>
#include <set>
#include <string>
#include <vector>

namespace tailweir {
namespace {

namespace fs = std::filesystem;

struct Include {
  std::string file, header;  // relative to the root; as written between the brackets or quotes
  bool quoted = false;
};

const fs::path& root() {
  static const fs::path kRoot = TAILWEIR_SOURCE_DIR;
  return kRoot;
}

std::vector<Include> includes_under(const std::string& folder) {
  std::vector<Include> found;
  for (const auto& entry : fs::recursive_directory_iterator(root() / folder)) {
    const std::string extension = entry.path().extension().string();
    if (extension != ".h" && extension != ".cpp") continue;
    std::ifstream file(entry.path());
    for (std::string line; std::getline(file, line);) {
      if (line.rfind("#include", 0) != 0) continue;
      const std::size_t open = line.find_first_of("<\"");
      const std::size_t close = line.find_last_of(">\"");
      if (open == std::string::npos || close <= open) continue;
      found.push_back({fs::relative(entry.path(), root()).string(),
                       line.substr(open + 1, close - open - 1), line[open] == '"'});
    }
  }
  return found;
}

bool starts(const std::string& text, const std::string& prefix) {
  return text.rfind(prefix, 0) == 0;
}

TEST(Boundaries, CoreIncludesOnlyItselfEigenAndBoost) {
  for (const Include& include : includes_under("core")) {
    if (include.quoted) {
      EXPECT_TRUE(starts(include.header, "core/")) << include.file << ": " << include.header;
      continue;
    }
    const bool standard = include.header.find('/') == std::string::npos &&
                          include.header.find(".h") == std::string::npos;
    const bool allowed = standard || starts(include.header, "Eigen/") ||
                         starts(include.header, "boost/math/") ||
                         (include.header == "cblas.h" && include.file == "core/spd/blas.cpp");
    EXPECT_TRUE(allowed) << include.file << ": " << include.header;
    for (const char* banned :
         {"iostream", "fstream", "thread", "chrono", "mutex", "filesystem", "ctime", "atomic"}) {
      EXPECT_NE(include.header, banned) << include.file;
    }
  }
}

TEST(Boundaries, EachLibraryHasOneHome) {
  const std::map<std::string, std::vector<std::string>> homes = {
      {"yaml-cpp/", {"service/settings/"}},
      {"zmq", {"service/intake/", "service/outlet/", "service/host/"}},
      {"spdlog/", {"service/host/"}},
      {"systemd/", {"service/host/"}},
      {"isa-l/", {"service/wire/"}},
      {"CLI/", {"service/main.cpp"}},
      {"nlohmann/", {"service/wire/", "service/commands/", "service/report/"}}};
  for (const Include& include : includes_under("service")) {
    for (const auto& [library, allowed] : homes) {
      if (include.quoted || !starts(include.header, library)) continue;
      EXPECT_TRUE(std::any_of(allowed.begin(), allowed.end(),
                              [&](const std::string& home) { return starts(include.file, home); }))
          << include.file << ": " << include.header;
    }
  }
}

TEST(Boundaries, EachFloorIncludesOnlyWhatStandsBelow) {
  const std::map<std::string, std::set<std::string>> below = {
      {"settings", {}},
      {"assemble", {"settings"}},
      {"scenario", {}},
      {"engine", {"settings", "assemble"}},
      {"report", {"engine", "settings", "intake"}},
      {"wire", {"engine", "settings"}},
      {"intake", {"engine", "settings", "wire"}},
      {"outlet", {"engine", "settings", "wire", "report"}},
      {"host", {"engine", "settings", "wire", "report", "intake", "outlet"}}};
  for (const auto& [room, allowed] : below) {
    for (const Include& include : includes_under("service/" + room)) {
      if (!include.quoted || !starts(include.header, "service/")) continue;
      const std::string target = include.header.substr(8, include.header.find('/', 8) - 8);
      EXPECT_TRUE(target == room || allowed.count(target) > 0)
          << include.file << ": " << include.header;
    }
  }
}

TEST(Boundaries, EngineKnowsNoSocketsClockOrDisk) {
  for (const char* folder : {"service/engine", "service/assemble"}) {
    for (const Include& include : includes_under(folder)) {
      for (const char* banned : {"chrono", "thread", "fstream", "filesystem", "ctime", "time.h",
                                 "unistd.h", "random", "mutex"}) {
        EXPECT_NE(include.header, banned) << include.file;
      }
    }
  }
}

TEST(Boundaries, TopLevelHoldsNothingElse) {
  const std::set<std::string> allowed = {"README.md", "DEVELOPERS.md", "CMakeLists.txt", "LICENSE",
                                         "service",   "core",          "config",         "tests",
                                         "deploy",    "build"};
  for (const auto& entry : fs::directory_iterator(root())) {
    const std::string name = entry.path().filename().string();
    if (name[0] != '.') {
      EXPECT_EQ(allowed.count(name), 1u) << name;
    }
  }
}

// The documents stand alone: nothing points out of the repository or at one machine.
TEST(Boundaries, NothingPointsOutside) {
  const std::vector<std::string> banned = {
      std::string("/wo") + "rk/", std::string("../sh") + "ared", std::string("/ho") + "me/"};
  for (const char* folder : {"service", "core", "config", "tests", "deploy"}) {
    for (const auto& entry : fs::recursive_directory_iterator(root() / folder)) {
      if (!entry.is_regular_file()) continue;
      std::ifstream file(entry.path());
      int number = 0;
      for (std::string line; std::getline(file, line);) {
        ++number;
        for (const std::string& word : banned) {
          EXPECT_EQ(line.find(word), std::string::npos)
              << entry.path() << ":" << number << ": " << word;
        }
      }
    }
  }
}

}  // namespace
}  // namespace tailweir
