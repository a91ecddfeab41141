#pragma once
// Purpose:   the parts of a target file that say what lies between transmitter and equalizer.
// Ownership: values only.
// Threads:   pure functions; mistakes go to the complaints of the document read from.

#include <string>
#include <vector>

#include "drivers/config/json_reader.hpp"
#include "sim_target/target_file.hpp"

namespace lanewright::sim {

Transmitter read_transmitter(const Object& from);
Line read_line(const Object& from, const Line& otherwise);
TouchstoneChannel read_touchstone_channel(const Object& from, const std::string& folder);

// Reads the keys that a lane may have, and the file's top may have for all lanes: package, stubs,
// crosstalk, compression; a lane's own take the place of the file's. Doesn't call finish().
void read_channel_parts(const Object& from, LaneChannel& to);

constexpr int most_lanes = 64;
std::vector<LaneChannel> read_lanes(const List& from, const LaneChannel& shared,
                                    const std::string& folder);

// `shared`: what each lane starts from, as for read_lanes.
Population read_population(const Object& from, const LaneChannel& shared,
                           const std::string& folder);

}  // namespace lanewright::sim
