#pragma once
// Purpose:   the parts from which a board file is decoded. Private to this folder.
// Ownership: values; the nodes handed in belong to the document.
// Threads:   one thread at a time per document.
// Errors:    all of these complain through the nodes and return what could be read.

#include <string>
#include <vector>

#include "drivers/config/board_file.hpp"

namespace lanewright {

// A name of letters, digits and _.
std::string decode_name(const Node& node);

LinkDescription decode_link(const Object& link);

// "dimensions" and "forbidden", with the check that the reset codes are allowed.
void decode_dimensions(const Object& top, BoardFile& board);
void decode_forbidden(const Object& top, BoardFile& board);

// What the sequence at hand may do.
enum class SequenceKind : std::uint8_t { apply, bring_up, monitor };

Sequence decode_sequence(const List& list, SequenceKind kind, const RegisterMapDescription& map);

void decode_monitor(const Object& monitor, BoardFile& board);

// Complains at `node` unless it names a field that exists and can be read.
FieldName decode_readable_field(const Node& node, const RegisterMapDescription& map);

// The largest value the field's bits can hold; all 32 bits where the field is unknown.
std::uint32_t largest_value(const RegisterMapDescription& map, const FieldName& name);

}  // namespace lanewright
