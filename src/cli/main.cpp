#include <iostream>

#include "cli/run.hpp"

int main(int argc, char** argv) {
  return static_cast<int>(
      tapwright::cli::run(std::vector<std::string>(argv + 1, argv + argc), std::cout, std::cerr));
}
