// Runs the real program: a child process with its output in files, and a folder that cleans itself.
#pragma once

#include <string>
#include <vector>

namespace tailweir::system_test {

class Folder {
 public:
  Folder();
  ~Folder();
  std::string path(const std::string& name) const { return path_ + "/" + name; }
  void write(const std::string& name, const std::string& text) const;
  std::string read(const std::string& name) const;

 private:
  std::string path_;
};

class Process {
 public:
  // Starts TAILWEIR_PROGRAM with arguments; standard output and error go to these files.
  Process(const std::vector<std::string>& arguments, const std::string& out,
          const std::string& err);
  ~Process();  // kills what still runs
  void signal(int number) const;
  // Exit code, or -1 when it is still running after `seconds`, or 128 + signal.
  int wait(double seconds);

 private:
  int pid_ = -1;
  bool done_ = false;
  int code_ = -1;
};

// Polls until the file contains the text; false after `seconds`.
bool wait_for_text(const std::string& file, const std::string& text, double seconds);
std::string read_file(const std::string& path);

// Runs to the end and returns the exit code; out and err get the output.
int run(const std::vector<std::string>& arguments, std::string& out, std::string& err);

}  // namespace tailweir::system_test
