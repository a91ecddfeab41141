#pragma once
// Purpose:   how margins of the oracle are written down, and how codes and requirements are named
//            on the command line.
// Ownership: values only.
// Threads:   pure functions.

#include <iosfwd>
#include <optional>
#include <span>
#include <string>
#include <vector>

#include "sim_target/physics/truth.hpp"

namespace lanewright::sim {

// "r1=9,r2=15,c1=15,c2=0": every dimension once, in any order, inside `counts`. On failure empty,
// and `problem` says what is wrong.
std::optional<std::vector<int>> codes_from_text(const std::string& text,
                                                const std::vector<int>& counts,
                                                std::string& problem);

// "height_mv=40,width_ui=0.3,error_ratio=1e-6": each at most once, what is missing stays as in
// `otherwise`; positive numbers, error_ratio at most 0.1, width_ui at most 1.
std::optional<Required> required_from_text(const std::string& text, const Required& otherwise,
                                           std::string& problem);

enum class TruthFormat { text, json, csv };

struct TruthHeading {
    std::string target;  // its name
    int lane = 0;
    std::string question;  // codes, best or all
    double nyquist_loss_db = 0;
    Required required;
};

// One JSON object; CSV with a heading line, units in the names; or text for people.
void write_truth(std::ostream& out, TruthFormat format, const TruthHeading& heading,
                 std::span<const CodesScore> results);

}  // namespace lanewright::sim
