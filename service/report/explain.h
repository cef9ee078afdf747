// What settings will do, in plain words: the text of `tailweir check`.
//
// Memory, tolerance and flag rate of every horizon, cautions about choices that are allowed but
// seldom wise, and what this version does not use. Thread rule: pure functions.
#pragma once

#include <string>
#include <vector>

#include "service/settings/settings.h"

namespace tailweir {

// Effective samples of a half-life of h samples: (1 + l)/(1 - l) with l = 2^(-1/h).
double effective_samples(double half_life);

// "500 samples", "6h", "half-life 60 samples (173 effective)".
std::string memory_text(const Memory& memory);

// One line each, empty when there is nothing to say.
std::vector<std::string> cautions(const Settings& settings);

// Several lines, each ended by a line feed; plain text, at most 100 columns but for long names.
std::string explain(const Settings& settings);

}  // namespace tailweir
