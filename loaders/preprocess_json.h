// The section `preprocess` of graph.json (GRAPH_FORMAT.md).
#pragma once

#include <string>

#include "leadsman/preprocess.h"
#include "loaders/json_cursor.h"

namespace leadsman::loaders {

/// Throws Error(kInput) with file and pointer.
Preprocess parse_preprocess(const JsonCursor& section);
/// One line of JSON.
std::string preprocess_text(const Preprocess& preprocess);

}  // namespace leadsman::loaders
