// One item of `panels`: YAML to a checked PanelInput. Part of the settings reader. Thread rule:
// plain values.
#pragma once

#include "service/settings/settings.h"
#include "service/settings/values.h"

namespace tailweir {

// Reads and checks one panel; false, with the Fault in `reader`, when something is wrong.
bool read_panel(const YamlNode& node, const std::vector<ChannelSettings>& channels,
                ValueReader& reader, PanelInput& out);

}  // namespace tailweir
