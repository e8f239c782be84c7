#pragma once
// Reports that people look at.

#include <string>
#include <vector>

#include "tapwright/report/figure.hpp"
#include "tapwright/report/solution_report.hpp"

namespace tapwright {

/// The figures of a solution: pulse, eye, bathtubs, frequency response, budget, methods, steps.
[[nodiscard]] std::vector<Figure> figures_of(const SolutionReport& report);

/// One HTML file with everything in it: opens from disk, asks for nothing.
[[nodiscard]] std::string html_of(const SolutionReport& report);

}  // namespace tapwright
