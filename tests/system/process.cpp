#include "tests/system/process.h"

#include <fcntl.h>
#include <signal.h>
#include <sys/wait.h>
#include <unistd.h>

#include <chrono>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <sstream>
#include <thread>

namespace tailweir::system_test {
namespace {

using Clock = std::chrono::steady_clock;
void pause_briefly() { std::this_thread::sleep_for(std::chrono::milliseconds(5)); }

}  // namespace

Folder::Folder() {
  char pattern[] = "/tmp/tailweir-test-XXXXXX";
  path_ = mkdtemp(pattern);
}

Folder::~Folder() { std::filesystem::remove_all(path_); }

void Folder::write(const std::string& name, const std::string& text) const {
  std::ofstream(path(name), std::ios::binary) << text;
}

std::string Folder::read(const std::string& name) const { return read_file(path(name)); }

std::string read_file(const std::string& path) {
  std::ifstream file(path, std::ios::binary);
  std::ostringstream text;
  text << file.rdbuf();
  return text.str();
}

Process::Process(const std::vector<std::string>& arguments, const std::string& out,
                 const std::string& err) {
  std::vector<char*> argv = {const_cast<char*>(TAILWEIR_PROGRAM)};
  for (const std::string& argument : arguments) argv.push_back(const_cast<char*>(argument.c_str()));
  argv.push_back(nullptr);
  pid_ = fork();
  if (pid_ == 0) {
    const int o = open(out.c_str(), O_CREAT | O_TRUNC | O_WRONLY, 0600);
    const int e = open(err.c_str(), O_CREAT | O_TRUNC | O_WRONLY, 0600);
    dup2(o, STDOUT_FILENO);
    dup2(e, STDERR_FILENO);
    execv(TAILWEIR_PROGRAM, argv.data());
    _exit(127);
  }
}

Process::~Process() {
  if (!done_) {
    kill(pid_, SIGKILL);
    wait(5);
  }
}

void Process::signal(int number) const { kill(pid_, number); }

int Process::wait(double seconds) {
  const auto end = Clock::now() + std::chrono::duration<double>(seconds);
  while (!done_) {
    int status = 0;
    if (waitpid(pid_, &status, WNOHANG) == pid_) {
      done_ = true;
      code_ = WIFEXITED(status) ? WEXITSTATUS(status) : 128 + WTERMSIG(status);
    } else if (Clock::now() > end) {
      return -1;
    } else {
      pause_briefly();
    }
  }
  return code_;
}

bool wait_for_text(const std::string& file, const std::string& text, double seconds) {
  const auto end = Clock::now() + std::chrono::duration<double>(seconds);
  while (Clock::now() < end) {
    if (read_file(file).find(text) != std::string::npos) return true;
    pause_briefly();
  }
  return false;
}

int run(const std::vector<std::string>& arguments, std::string& out, std::string& err) {
  const Folder folder;
  Process process(arguments, folder.path("out"), folder.path("err"));
  const int code = process.wait(200);
  out = folder.read("out");
  err = folder.read("err");
  return code;
}

}  // namespace tailweir::system_test
