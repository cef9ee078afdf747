// Published messages as lines for people; shared by tap and demo.
#pragma once

#include <string>
#include <vector>

#include "service/engine/records.h"

namespace tailweir {

// "12:01:00  metals/slow   live  nu 4.3 [3.1, 6.0]  scale 12.1  distance 8.9  p 0.41"
std::string estimate_text(const EstimateRecord& record,
                          const std::vector<PanelDescription>& panels);

// "12:01:00  metals/slow   FLAG severe  p 2e-7: tin -9.1, copper 3.2 (conditional units)" from the
// flag's JSON line; empty when it is not one.
std::string flag_text(const std::string& json);

// "12:01:00  metals/slow   ALERT tail heavier raised: ..." from the alert's JSON line.
std::string alert_text(const std::string& json);

}  // namespace tailweir
