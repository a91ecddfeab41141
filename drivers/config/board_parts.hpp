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
enum class SequenceKind : std::uint8_t {
    apply,
    bring_up,
    monitor,  // of a latched monitor
    begin,    // these three of a counted one
    look,
    origin
};

Sequence decode_sequence(const List& list, SequenceKind kind, const RegisterMapDescription& map);

void decode_monitor(const Object& monitor, BoardFile& board);

// What only a counted monitor has; the rest of the object is decode_monitor's.
void decode_counted(const Object& monitor, BoardFile& board);

// Complains of names of values that nobody picks up, those which a combine step uses apart.
void check_value_names(const List& list, const Sequence& sequence,
                       const std::vector<std::string_view>& known);

// Whether the sequence reads or combines a value of that name.
bool makes(const Sequence& sequence, std::string_view name);

// "telemetry", "sentinel" and "preflight".
void decode_telemetry(const Object& top, BoardFile& board);
void decode_sentinel(const Object& top, BoardFile& board);
void decode_preflight(const Object& top, BoardFile& board);

// Complains at `node` unless it names a field of role scratch.
FieldName decode_scratch(const Node& node, const RegisterMapDescription& map);

// Complains at `node` unless it names a field that exists and can be read.
FieldName decode_readable_field(const Node& node, const RegisterMapDescription& map);

// The largest value the field's bits can hold; all 32 bits where the field is unknown.
std::uint32_t largest_value(const RegisterMapDescription& map, const FieldName& name);

}  // namespace lanewright
