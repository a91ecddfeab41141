#include "sim_target/truth_report.hpp"

#include <array>
#include <charconv>
#include <cmath>
#include <cstdio>
#include <nlohmann/json.hpp>
#include <ostream>
#include <utility>

namespace lanewright::sim {

namespace {

using Json = nlohmann::ordered_json;

struct Setting {
    std::string key, value;
};

std::optional<std::vector<Setting>> settings_of(const std::string& text, std::string& problem) {
    std::vector<Setting> settings;
    for (std::size_t at = 0; at <= text.size();) {
        std::size_t end = text.find(',', at);
        if (end == std::string::npos) end = text.size();
        const std::string part = text.substr(at, end - at);
        const std::size_t equals = part.find('=');
        if (equals == std::string::npos || equals == 0 || equals + 1 == part.size()) {
            problem = "'" + part + "' is not of the form name=value";
            return std::nullopt;
        }
        settings.push_back({part.substr(0, equals), part.substr(equals + 1)});
        for (std::size_t i = 0; i + 1 < settings.size(); ++i) {
            if (settings[i].key == settings.back().key) {
                problem = "'" + settings[i].key + "' is given twice";
                return std::nullopt;
            }
        }
        at = end + 1;
    }
    return settings;
}

template <class Number>
std::optional<Number> number_of(const std::string& text) {
    Number value{};
    const char* end = text.data() + text.size();
    const auto [stop, error] = std::from_chars(text.data(), end, value);
    if (error != std::errc() || stop != end) return std::nullopt;
    return value;
}

std::string known_names() {
    std::string names;
    for (const std::string_view name : dimension_names())
        names += (names.empty() ? "" : ", ") + std::string(name);
    return names;
}

Json as_json(const CodesScore& result) {
    Json codes = Json::object();
    for (std::size_t i = 0; i < result.codes.size(); ++i)
        codes[std::string(dimension_names()[i])] = result.codes[i];
    const Margins& m = result.margins;
    return Json{{"codes", codes},
                {"status", !m.locked  ? "no_lock"
                           : m.closed ? "closed"
                                      : "open"},
                {"up_mv", m.up_mv},
                {"down_mv", m.down_mv},
                {"left_ui", m.left_ui},
                {"right_ui", m.right_ui},
                {"height_mv", m.height_mv()},
                {"width_ui", m.width_ui()},
                {"score", result.score},
                {"centre_error_ratio", m.centre_error_ratio},
                {"noise_mv", m.noise_mv}};
}

void write_csv(std::ostream& out, std::span<const CodesScore> results) {
    for (const std::string_view name : dimension_names()) out << name << ',';
    out << "status,up_mv,down_mv,left_ui,right_ui,score,centre_error_ratio,noise_mv\n";
    std::array<char, 400> line{};
    for (const CodesScore& result : results) {
        for (const int code : result.codes) out << code << ',';
        const Margins& m = result.margins;
        std::snprintf(line.data(), line.size(), "%s,%.9g,%.9g,%.9g,%.9g,%.9g,%.9g,%.9g\n",
                      !m.locked  ? "no_lock"
                      : m.closed ? "closed"
                                 : "open",
                      m.up_mv, m.down_mv, m.left_ui, m.right_ui, result.score, m.centre_error_ratio,
                      m.noise_mv);
        out << line.data();
    }
}

void write_text(std::ostream& out, const TruthHeading& heading,
                std::span<const CodesScore> results) {
    std::array<char, 400> line{};
    std::snprintf(line.data(), line.size(),
                  "SIMULATED TARGET: proves nothing about silicon\n"
                  "lane %d, %.1f dB at half the bit rate\n"
                  "required at error ratio %.3g: %.6g mV, %.6g UI\n",
                  heading.lane, heading.nyquist_loss_db, heading.required.error_ratio,
                  heading.required.height_mv, heading.required.width_ui);
    out << heading.target << '\n' << line.data();
    for (const std::string_view name : dimension_names()) out << name << "  ";
    out << "    up_mv  down_mv  left_ui right_ui    score  centre errors\n";
    for (const CodesScore& result : results) {
        for (const int code : result.codes) {
            std::snprintf(line.data(), line.size(), "%2d  ", code);
            out << line.data();
        }
        const Margins& m = result.margins;
        std::snprintf(line.data(), line.size(), " %8.2f %8.2f %8.4f %8.4f %8.4f  %13.3g%s\n",
                      m.up_mv, m.down_mv, m.left_ui, m.right_ui, result.score, m.centre_error_ratio,
                      !m.locked  ? "  no lock"
                      : m.closed ? "  closed"
                                 : "");
        out << line.data();
    }
}

}  // namespace

std::optional<std::vector<int>> codes_from_text(const std::string& text,
                                                const std::vector<int>& counts,
                                                std::string& problem) {
    const auto settings = settings_of(text, problem);
    if (!settings) return std::nullopt;
    std::vector<int> codes(counts.size(), -1);
    for (const Setting& setting : *settings) {
        const auto& names = dimension_names();
        std::size_t i = 0;
        while (i < names.size() && names[i] != setting.key) ++i;
        if (i == names.size()) {
            problem = "'" + setting.key + "' is no dimension; they are " + known_names();
            return std::nullopt;
        }
        const std::optional<int> code = number_of<int>(setting.value);
        if (!code || *code < 0 || *code >= counts[i]) {
            problem = setting.key + "=" + setting.value + ": a code from 0 to " +
                      std::to_string(counts[i] - 1) + " is needed";
            return std::nullopt;
        }
        codes[i] = *code;
    }
    for (std::size_t i = 0; i < codes.size(); ++i) {
        if (codes[i] >= 0) continue;
        problem = "no code for " + std::string(dimension_names()[i]);
        return std::nullopt;
    }
    return codes;
}

std::optional<Required> required_from_text(const std::string& text, const Required& otherwise,
                                           std::string& problem) {
    const auto settings = settings_of(text, problem);
    if (!settings) return std::nullopt;
    Required required = otherwise;
    constexpr double least = 1e-18;
    const std::array<std::pair<const char*, std::pair<double*, double>>, 3> known = {{
        {"height_mv", {&required.height_mv, 1e5}},
        {"width_ui", {&required.width_ui, 1.0}},
        {"error_ratio", {&required.error_ratio, 0.1}},
    }};
    for (const Setting& setting : *settings) {
        bool found = false;
        for (const auto& [name, target] : known) {
            if (setting.key != name) continue;
            found = true;
            const std::optional<double> value = number_of<double>(setting.value);
            if (!value || !(*value >= least && *value <= target.second)) {
                problem = setting.key + "=" + setting.value + ": a number from " +
                          Json(least).dump() + " to " + Json(target.second).dump() + " is needed";
                return std::nullopt;
            }
            *target.first = *value;
        }
        if (!found) {
            problem = "'" + setting.key + "' is not one of height_mv, width_ui, error_ratio";
            return std::nullopt;
        }
    }
    return required;
}

void write_truth(std::ostream& out, TruthFormat format, const TruthHeading& heading,
                 std::span<const CodesScore> results) {
    if (format == TruthFormat::csv) {
        write_csv(out, results);
        return;
    }
    if (format == TruthFormat::text) {
        write_text(out, heading, results);
        return;
    }
    Json list = Json::array();
    for (const CodesScore& result : results) list.push_back(as_json(result));
    const Json whole{{"format", "lanewright-truth/1"},
                     {"target", heading.target},
                     {"simulated", true},
                     {"lane", heading.lane},
                     {"question", heading.question},
                     {"nyquist_loss_db", heading.nyquist_loss_db},
                     {"required",
                      {{"height_mv", heading.required.height_mv},
                       {"width_ui", heading.required.width_ui},
                       {"error_ratio", heading.required.error_ratio}}},
                     {"results", list}};
    out << whole.dump() << '\n';
}

}  // namespace lanewright::sim
