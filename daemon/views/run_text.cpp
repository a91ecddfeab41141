#include "daemon/views/run_text.hpp"

#include <cmath>
#include <cstdio>
#include <sstream>

#include "daemon/engine/lane_setup.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/views/preflight_views.hpp"
#include "daemon/views/replay_views.hpp"
#include "daemon/views/telemetry_views.hpp"

namespace lanewright {

namespace {

// printf into a string; every caller's text is far below the limit.
template <class... Values>
std::string format(const char* pattern, Values... values) {
    char text[256];
    std::snprintf(text, sizeof text, pattern, values...);
    return text;
}

std::string codes_text(const CodeSpace& space, const Codes& codes, char between) {
    std::string out;
    for (std::size_t i = 0; i < codes.value.size(); ++i) {
        if (!out.empty()) out += between;
        if (i < space.dimensions().size() && between == ' ')
            out += space.dimensions()[i].name + "=";
        out += std::to_string(codes.value[i]);
    }
    return out;
}

std::optional<double> opening_of(const std::optional<Margin>& margin, bool height) {
    if (!margin) return std::nullopt;
    const Reading& reading = margin->reading;
    if (margin->score.bound == Bound::at_most) return std::nullopt;
    const auto& whole = height ? reading.height_mv : reading.width_ui;
    const auto& one = height ? reading.up_mv : reading.left_ui;
    const auto& other = height ? reading.down_mv : reading.right_ui;
    if (whole) return whole->value;
    if (one && other) return one->value + other->value;
    return std::nullopt;
}

std::string number_or_dash(const std::optional<double>& value, const char* pattern) {
    return value && std::isfinite(*value) ? format(pattern, *value) : "-";
}

std::string score_text(const std::optional<Margin>& margin) {
    if (!margin) return "-";
    if (margin->reading.status == Status::no_lock) return "no lock";
    if (margin->score.bound == Bound::at_most) return "closed";
    if (!std::isfinite(margin->score.value)) return "-";
    return format("%.2f", margin->score.value);
}

std::string limits_text(const std::optional<Margin>& margin) {
    if (!margin) return "-";
    const auto limit = [](double value) {
        return std::isfinite(value) ? format("%.2f", value) : std::string("?");
    };
    return limit(margin->score.low) + ".." + limit(margin->score.high);
}

const char* colour_of(Verdict verdict) {
    switch (verdict) {
        case Verdict::meets:
            return "\033[32m";
        case Verdict::fails:
            return "\033[31m";
        case Verdict::undecided:
            return "\033[33m";
    }
    return "";
}

std::string verdict_cell(const LaneResult& lane, bool colour) {
    const bool failed = lane.outcome == LaneOutcome::failed;
    const std::string word = lane.judgement ? name_of(lane.judgement->verdict)
                             : failed       ? "failed"
                                            : "-";
    std::string cell = format("%-9s", word.c_str());
    if (!colour || (!lane.judgement && !failed)) return cell;
    const char* escape = failed ? "\033[31m" : colour_of(lane.judgement->verdict);
    return escape + cell + "\033[0m";
}

// As it is where it fits, else broken at spaces.
std::string fitted(const std::string& line) {
    const std::string shown = printable(line);
    return shown.size() <= 80 ? shown + "\n" : wrapped(shown, "  ");
}

// What the monitor's counts mean; of an imported run the board cannot tell.
std::string definition_text(const RunView& view) {
    if (view.manifest.imported) return {};
    if (view.board.monitor.error_definition == "decision") {
        return wrapped(
            "errors counted against the receiver's own decision: counts at its decision point "
            "prove nothing, and a closed eye has no centre error ratio",
            "");
    }
    return "errors counted against the known pattern\n";
}

std::string head_of(const RunView& view) {
    const Manifest& manifest = view.manifest;
    std::string out = "run " + manifest.run + "  " + run_status(view) + "\n";
    out +=
        fitted("board " + manifest.board + "  recipe " + manifest.recipe + "  seed " +
               std::to_string(manifest.seed) + "  " + iso8601(manifest.started_ns, manifest.zone));
    if (!manifest.condition.empty()) out += fitted("condition " + manifest.condition);
    for (const auto& [key, value] : manifest.tags) out += fitted("tag " + key + "=" + value);
    const Required& required = view.recipe.required;
    if (manifest.purpose == Purpose::preflight) {
        out += "preflight alone: nothing is searched, all codes are put back\n";
    } else if (!manifest.imported) {
        out += format("required %g mV x %g UI at error ratio %g", required.height_mv,
                      required.width_ui, required.error_ratio) +
               "\n";
    }
    out += definition_text(view);
    if (manifest.identity.simulated) {
        out += "SIMULATED BOARD: these results prove nothing about silicon\n";
    }
    if (manifest.imported) {
        const std::string unknown = unknown_of(manifest, view.state);
        out += wrapped("IMPORTED from " + manifest.imported->readings_path +
                           ", measured by other means" +
                           (unknown.empty() ? "" : "; not known: " + unknown),
                       "");
    }
    return out;
}

std::string csv_number(double value) {
    return std::isfinite(value) ? format("%.17g", value) : std::string();
}

std::string csv_text(const std::string& text) {
    if (text.find_first_of(",\"\n\r") == std::string::npos) return text;
    std::string out = "\"";
    for (const char c : text) out += c == '"' ? std::string("\"\"") : std::string(1, c);
    return out + "\"";
}

const char* name_of_bound(Bound bound) {
    switch (bound) {
        case Bound::exact:
            return "exact";
        case Bound::at_most:
            return "at_most";
        case Bound::at_least:
            return "at_least";
    }
    return "";
}

struct MeasuredColumn {
    const char* name;
    const char* unit;
    std::optional<Measured> Reading::* member;
};
constexpr MeasuredColumn measured_columns[] = {
    {"up", "mv", &Reading::up_mv},         {"down", "mv", &Reading::down_mv},
    {"left", "ui", &Reading::left_ui},     {"right", "ui", &Reading::right_ui},
    {"height", "mv", &Reading::height_mv}, {"width", "ui", &Reading::width_ui}};

struct SlopeColumn {
    const char* name;
    const char* unit;
    Measured EdgeSlopes::* member;
};
constexpr SlopeColumn slope_columns[] = {{"up", "mv", &EdgeSlopes::up_mv},
                                         {"down", "mv", &EdgeSlopes::down_mv},
                                         {"left", "ui", &EdgeSlopes::left_ui},
                                         {"right", "ui", &EdgeSlopes::right_ui}};

std::string csv_slopes(const std::optional<EdgeSlopes>& slopes) {
    std::string out;
    for (const SlopeColumn& column : slope_columns) {
        if (!slopes) {
            out += ",,,";
            continue;
        }
        const Measured& slope = (*slopes).*column.member;
        out += "," + csv_number(slope.value) + "," + csv_number(slope.std_error) + "," +
               name_of_bound(slope.bound);
    }
    return out;
}

std::string csv_header(const RunView& view, const std::vector<std::string>& told) {
    std::string out = "run,board,simulated,lane,ordinal,stage,time,condition";
    for (const Dimension& dimension : view.space.dimensions()) {
        out += "," + csv_text(dimension.name + "_code");
    }
    out += ",status,error_ratio,error_definition,basis";
    for (const MeasuredColumn& column : measured_columns) {
        const std::string name = column.name;
        const std::string unit = column.unit;
        out += "," + name + "_" + unit + "," + name + "_se_" + unit + "," + name + "_bound";
    }
    out += ",height_systematic_mv,width_systematic_ui,centre_error_ratio";
    for (const SlopeColumn& column : slope_columns) {
        const std::string name = column.name;
        const std::string unit = column.unit;
        out += "," + name + "_slope_" + unit + "," + name + "_slope_se_" + unit + "," + name +
               "_slope_bound";
    }
    out += ",counts,centred,bit_count,cost_s,height_sigma_mv,width_sigma_ui";
    for (const std::string& name : told) out += "," + csv_text(name);
    return out + ",score,why\n";
}

// "PHASE_UI:OFFSET_MV:BITS:ERRORS" a look, between spaces; a plus behind saturated ones.
std::string csv_counts(const std::vector<Count>& counts) {
    std::string out;
    for (const Count& count : counts) {
        out += (out.empty() ? "" : " ") + csv_number(count.look.phase_ui) + ":" +
               csv_number(count.look.offset_mv) + ":" + std::to_string(count.look.bits) + ":" +
               std::to_string(count.errors) + (count.saturated ? "+" : "");
    }
    return out;
}

// The noise that the lane's strategy was told.
std::string csv_noise(const RunView& view, std::uint16_t lane) {
    const MonitorNoise noise = noise_of(view, view.state.lanes.at(lane));
    return csv_number(noise.height_sigma_mv) + "," + csv_number(noise.width_sigma_ui);
}

std::string csv_row(const RunView& view, std::uint16_t lane, const LaneReadingRecord& record,
                    const std::vector<std::string>& told) {
    const Manifest& manifest = view.manifest;
    const Reading& reading = record.reading;
    std::string out = manifest.run + "," + csv_text(manifest.board) + "," +
                      (manifest.identity.simulated ? "true" : "false") + "," +
                      std::to_string(lane) + "," + std::to_string(record.ordinal) + "," +
                      name_of(record.stage) + "," + iso8601(record.at_ns, manifest.zone) + "," +
                      csv_text(manifest.condition);
    for (const std::int32_t code : reading.codes.value) out += "," + std::to_string(code);
    out += std::string(",") + name_of(reading.status) + "," + csv_number(reading.error_ratio) +
           "," + name_of(reading.error_definition) + "," + name_of(reading.basis);
    for (const MeasuredColumn& column : measured_columns) {
        const std::optional<Measured>& measured = reading.*column.member;
        out += measured ? "," + csv_number(measured->value) + "," +
                              csv_number(measured->std_error) + "," + name_of_bound(measured->bound)
                        : std::string(",,,");
    }
    const Systematic systematic = systematic_of(view.board, reading);
    out += "," + (systematic.height_mv ? csv_number(*systematic.height_mv) : std::string());
    out += "," + (systematic.width_ui ? csv_number(*systematic.width_ui) : std::string());
    out += reading.centre_error_ratio ? "," + csv_number(*reading.centre_error_ratio)
                                      : std::string(",");
    out += csv_slopes(reading.slopes) + "," + csv_counts(reading.counts);
    return out + (reading.centred_assumed ? ",assumed," : ",measured,") +
           std::to_string(reading.bit_count) + "," + csv_number(reading.cost_s) + "," +
           csv_noise(view, lane) + telemetry_cells(told, reading) + "," +
           csv_number(score_of(reading, view.recipe.required).value) + "," + csv_text(record.why) +
           "\n";
}

// One line of `writes`.
std::string write_line(std::uint16_t lane, const RegisterDescription& reg,
                       const FieldDescription& field, const RegisterMapDescription& map,
                       std::uint32_t value, const std::string& comment) {
    const std::uint32_t address =
        reg.per_lane ? map.lane_base + lane * map.lane_stride + reg.address : reg.address;
    const int digits = static_cast<int>(reg.width_bits / 4);
    return format("%-4u %-12s 0x%04X  0x%0*X  0x%0*X  # ", static_cast<unsigned>(lane),
                  reg.name.c_str(), address, digits, field.mask(), digits,
                  (value << field.low_bit) & field.mask()) +
           comment + "\n";
}

std::string lane_writes(const RunView& view, std::uint16_t lane, const Codes& codes) {
    std::string out;
    const RegisterMapDescription& map = view.board.map;
    const auto line = [&](const FieldName& name, std::uint32_t value, const std::string& comment) {
        out += write_line(lane, *map.find(name.reg), *map.find(name), map, value, comment);
    };
    for (const Step& step : view.board.apply) {
        if (std::holds_alternative<WriteCodesStep>(step)) {
            for (std::size_t i = 0; i < codes.value.size(); ++i) {
                const DimensionDescription& dimension = view.board.dimensions[i];
                line(dimension.field, static_cast<std::uint32_t>(codes.value[i]),
                     dimension.name + " = " + std::to_string(codes.value[i]));
            }
        } else if (const auto* write = std::get_if<WriteStep>(&step)) {
            const auto* literal = std::get_if<std::uint32_t>(&write->value);
            if (literal != nullptr) {
                line(write->field, *literal,
                     write->field.text() + " = " + std::to_string(*literal));
            }
        } else if (const auto* pause = std::get_if<PauseStep>(&step)) {
            out +=
                "# lane " + std::to_string(lane) + format(": pause %g ms", pause->pause_ms) + "\n";
        } else if (const auto* wait = std::get_if<WaitStep>(&step)) {
            out += "# lane " + std::to_string(lane) + ": wait until " + wait->field.text() +
                   format(" = %u, at most %g ms", wait->equals, wait->timeout_ms) + "\n";
        }
    }
    return out;
}

// "; the step's calibration may add or take 13.7 mV, 0.081 UI"
std::string systematic_text(const Systematic& systematic) {
    std::string out;
    if (systematic.height_mv && *systematic.height_mv > 0) {
        out += format("%.1f mV", *systematic.height_mv);
    }
    if (systematic.width_ui && *systematic.width_ui > 0) {
        out += (out.empty() ? "" : ", ") + format("%.3f UI", *systematic.width_ui);
    }
    return out.empty() ? out : "; apart from the limits, step calibration may add or take " + out;
}

// "lane 3: r1=4 ... became r1=9 ...; better by ...; the lower limit ..."
std::string lane_sentence(const RunView& view, const LaneResult& lane) {
    std::string out = "lane " + std::to_string(lane.lane) + ": ";
    if (lane.former) out += codes_text(view.space, *lane.former, ' ');
    if (lane.decided && lane.former) {
        out += *lane.decided == *lane.former
                   ? " kept"
                   : " became " + codes_text(view.space, *lane.decided, ' ');
    }
    if (lane.left == Settlement::restored && lane.decided) out += " (the former put back)";
    if (lane.left == Settlement::restored && !lane.decided) out += " put back";
    if (lane.left == Settlement::given_up) out += " (given up: not restored)";
    out += "; " + (lane.reason.empty() ? std::string("not finished") : lane.reason);
    if (lane.judgement && !lane.judgement->reason.empty()) out += "; " + lane.judgement->reason;
    if (lane.after) out += systematic_text(systematic_of(view.board, lane.after->reading));
    if (lane.after && lane.after->reading.centred_assumed) {
        out += "; the monitor tells height and width only, so the eye is taken as centred";
    }
    return out;
}

std::string lanes_account(const RunView& view) {
    std::string out;
    for (const LaneResult& lane : lane_results(view)) {
        out += wrapped(lane_sentence(view, lane), "  ");
        for (const std::string& note : lane.notes) out += wrapped("- " + note, "    ");
    }
    return out;
}

}  // namespace

std::string printable(const std::string& text) {
    std::string out;
    for (std::size_t i = 0; i < text.size(); ++i) {
        const auto byte = static_cast<unsigned char>(text[i]);
        // U+0080 to U+009F are control characters, too: C2 80 to C2 9F in UTF-8.
        const bool pair = byte == 0xC2 && i + 1 < text.size() &&
                          static_cast<unsigned char>(text[i + 1]) < 0xA0 &&
                          static_cast<unsigned char>(text[i + 1]) >= 0x80;
        if (pair) {
            out += format("\\x%02X", static_cast<unsigned char>(text[++i]));
        } else if ((byte < 0x20 && byte != '\n') || byte == 0x7F) {
            out += format("\\x%02X", byte);
        } else {
            out += text[i];
        }
    }
    return out;
}

std::string wrapped(const std::string& text, const std::string& indent) {
    std::istringstream words(printable(text));
    std::string out, line = indent, word;
    while (words >> word) {
        if (line.size() > indent.size() && line.size() + 1 + word.size() > 80) {
            out += line + "\n";
            line = indent;
        }
        line += (line.size() > indent.size() ? " " : "") + word;
    }
    return out + line + "\n";
}

std::string run_table(const RunView& view, bool colour) {
    // The codes have their column where they fit; the account below the table has them anyway.
    constexpr std::size_t codes_width = 11;
    std::string codes_head;
    for (const Dimension& dimension : view.space.dimensions()) {
        codes_head += (codes_head.empty() ? "" : "/") + dimension.name;
    }
    const bool codes_fit = codes_head.size() <= codes_width;
    const auto codes_cell = [&](const std::string& text) {
        return codes_fit ? format(" %-11s", text.c_str()) : std::string();
    };
    std::string out =
        format("%4s  %-9s %-9s", "lane", "verdict", "outcome") + codes_cell(codes_head) +
        format(" %6s %5s %7s %6s %-10s %2s\n", "height", "width", "score", "score", "95 %", "n");
    out += format("%4s  %-9s %-9s", "", "", "") + codes_cell("") +
           format(" %6s %5s %7s %6s limits\n", "mV", "UI", "before", "after");
    for (const LaneResult& lane : lane_results(view)) {
        out +=
            format("%4u  ", static_cast<unsigned>(lane.lane)) + verdict_cell(lane, colour) +
            format(" %-9s", lane.outcome ? name_of(*lane.outcome) : "-") +
            codes_cell(lane.decided ? codes_text(view.space, *lane.decided, '/') : "-") +
            format(" %6s %5s %7s %6s %-10s %2zu\n",
                   number_or_dash(opening_of(lane.after, true), "%.1f").c_str(),
                   number_or_dash(opening_of(lane.after, false), "%.3f").c_str(),
                   score_text(lane.before).c_str(), score_text(lane.after).c_str(),
                   limits_text(lane.after).c_str(), lane.reading_count - lane.side_reading_count);
    }
    return out + "n: readings, before and after included; void ones, preflight and reference not\n";
}

std::string run_account(const RunView& view, bool colour) {
    std::string out = head_of(view) + "\n";
    if (view.manifest.purpose == Purpose::preflight) {
        out += preflight_table(view);
    } else {
        out += run_table(view, colour) + "\n";
        if (const std::string found = preflight_summary(view); !found.empty()) out += found + "\n";
        out += lanes_account(view);
    }
    if (const std::string told = telemetry_text(view); !told.empty()) {
        out += "\n" + wrapped(told, "");
    }
    const LinkCounts& link = view.state.link;
    out += format("\nlink: %llu frames, %llu bad, %llu retries, %llu reconnects, %llu resets",
                  static_cast<unsigned long long>(link.frames),
                  static_cast<unsigned long long>(link.bad_frames),
                  static_cast<unsigned long long>(link.retries),
                  static_cast<unsigned long long>(link.reconnects),
                  static_cast<unsigned long long>(link.resets)) +
           format("; wall time %.1f s\n", view.state.wall_s);
    if (view.state.ended && !view.state.ended->reason.empty()) {
        out += wrapped("ended: " + view.state.ended->reason, "");
    }
    return out;
}

std::string runs_table(const std::vector<RunView>& runs) {
    std::string out = format("%-24s %-11s %-12s %-14s %s\n", "run", "status", "board", "recipe",
                             "lanes that meet");
    for (const RunView& view : runs) {
        std::size_t meets = 0;
        const std::vector<LaneResult> lanes = lane_results(view);
        for (const LaneResult& lane : lanes) {
            if (lane.judgement && lane.judgement->verdict == Verdict::meets) ++meets;
        }
        std::string came_to = std::to_string(meets) + " of " + std::to_string(lanes.size());
        if (view.manifest.purpose == Purpose::preflight) {
            came_to = preflight_passed(view.state) ? "fit" : "NOT FIT";
        }
        if (view.manifest.identity.simulated) came_to += " (sim.)";
        out += format("%-24s %-11s %-12.12s %-14.14s %s\n", view.manifest.run.c_str(),
                      run_status(view).c_str(), printable(view.manifest.board).c_str(),
                      printable(view.manifest.recipe).c_str(), came_to.c_str());
    }
    return out;
}

std::string readings_csv(const RunView& view) {
    const std::vector<std::string> told = telemetry_names(view);
    std::string out = csv_header(view, told);
    for (const auto& [lane, state] : view.state.lanes) {
        for (const LaneReadingRecord& record : state.readings) {
            out += csv_row(view, lane, record, told);
        }
    }
    return out;
}

std::string register_writes(const RunView& view) {
    std::string lines;
    for (const LaneResult& lane : lane_results(view)) {
        if (lane.decided && lane.outcome && *lane.outcome != LaneOutcome::failed) {
            lines += lane_writes(view, lane.lane, *lane.decided);
        }
    }
    if (lines.empty()) {
        throw BadStoreData("run " + view.manifest.run + " has no lane with decided codes to write");
    }
    std::string head = "# run " + view.manifest.run + ", board " + view.manifest.board + "\n";
    if (view.manifest.identity.simulated)
        head += "# SIMULATED BOARD: proves nothing about silicon\n";
    return head + "# lane register    address mask    value\n" + lines;
}

}  // namespace lanewright
