#include "sim_target/physics/touchstone.hpp"

#include <algorithm>
#include <charconv>
#include <cmath>
#include <fstream>
#include <numbers>
#include <optional>
#include <sstream>
#include <string_view>

namespace lanewright::sim {

namespace {

enum class Pair { magnitude_angle, decibel_angle, real_imaginary };

struct Options {
    double hertz = 1e9;
    Pair pair = Pair::magnitude_angle;
    double reference_ohm = 50;
};

struct Number {
    double value;
    std::size_t line;
};

[[noreturn]] void bad(const std::string& file, std::size_t line, const std::string& what) {
    throw BadData(file + ":" + std::to_string(line) + ": " + what);
}

std::string lower_case(std::string_view text) {
    std::string out(text);
    for (char& c : out)
        if (c >= 'A' && c <= 'Z') c = static_cast<char>(c - 'A' + 'a');
    return out;
}

std::vector<std::string_view> words_of(std::string_view line) {
    std::vector<std::string_view> words;
    const std::string_view blank = " \t\r\f\v";
    for (std::size_t at = line.find_first_not_of(blank); at != std::string_view::npos;) {
        std::size_t end = line.find_first_of(blank, at);
        if (end == std::string_view::npos) end = line.size();
        words.push_back(line.substr(at, end - at));
        at = line.find_first_not_of(blank, end);
    }
    return words;
}

std::optional<double> number_of(std::string_view word) {
    if (word.starts_with('+')) word.remove_prefix(1);
    double value = 0;
    const auto [end, error] = std::from_chars(word.data(), word.data() + word.size(), value);
    if (error != std::errc() || end != word.data() + word.size() || !std::isfinite(value))
        return std::nullopt;
    return value;
}

Options options_of(std::string_view line, const std::string& file, std::size_t line_number) {
    Options options;
    const std::vector<std::string_view> words = words_of(line.substr(1));
    for (std::size_t i = 0; i < words.size(); ++i) {
        const std::string word = lower_case(words[i]);
        if (word == "hz")
            options.hertz = 1;
        else if (word == "khz")
            options.hertz = 1e3;
        else if (word == "mhz")
            options.hertz = 1e6;
        else if (word == "ghz")
            options.hertz = 1e9;
        else if (word == "ma")
            options.pair = Pair::magnitude_angle;
        else if (word == "db")
            options.pair = Pair::decibel_angle;
        else if (word == "ri")
            options.pair = Pair::real_imaginary;
        else if (word == "y" || word == "z" || word == "g" || word == "h")
            bad(file, line_number,
                "parameters of kind " + word + "; only scattering parameters (S) are read");
        else if (word == "r") {
            const std::optional<double> ohm =
                i + 1 < words.size() ? number_of(words[i + 1]) : std::nullopt;
            if (!ohm || *ohm <= 0) bad(file, line_number, "R needs a resistance above zero");
            options.reference_ohm = *ohm;
            ++i;
        } else if (word != "s")
            bad(file, line_number,
                "unknown word '" + std::string(words[i]) + "' in the option line");
    }
    return options;
}

struct Contents {
    Options options;
    std::vector<Number> numbers;
    std::size_t last_line = 0;
};

Contents contents_of(std::string_view text, const std::string& file) {
    Contents contents;
    bool options_seen = false;
    for (std::size_t at = 0; at < text.size();) {
        std::size_t end = text.find('\n', at);
        if (end == std::string_view::npos) end = text.size();
        std::string_view line = text.substr(at, end - at);
        at = end + 1;
        const std::size_t number = ++contents.last_line;
        line = line.substr(0, line.find('!'));
        const std::vector<std::string_view> words = words_of(line);
        if (words.empty()) continue;
        if (words.front().starts_with('[')) {
            bad(file, number,
                "keyword " + std::string(words.front()) +
                    ": version 2 files are not read, save as version 1");
        }
        if (words.front().starts_with('#')) {
            const auto hash = line.substr(line.find('#'));
            if (!options_seen) contents.options = options_of(hash, file, number);
            options_seen = true;
            continue;
        }
        for (const std::string_view word : words) {
            const std::optional<double> value = number_of(word);
            if (!value) bad(file, number, "'" + std::string(word.substr(0, 40)) + "' is no number");
            contents.numbers.push_back({*value, number});
        }
    }
    return contents;
}

Complex complex_of(Pair pair, double first, double second) {
    if (pair == Pair::real_imaginary) return {first, second};
    const double size = pair == Pair::magnitude_angle ? first : std::pow(10.0, first / 20.0);
    return std::polar(1.0, second * std::numbers::pi / 180.0) * size;
}

}  // namespace

Touchstone parse_touchstone(const std::string& text, const std::string& file_name,
                            std::size_t ports) {
    const Contents contents = contents_of(text, file_name);
    const std::size_t entries = ports * ports;
    const std::size_t record = 1 + 2 * entries;
    Touchstone data;
    data.ports = ports;
    data.reference_ohm = contents.options.reference_ohm;
    const std::vector<Number>& numbers = contents.numbers;
    for (std::size_t at = 0; at < numbers.size(); at += record) {
        const double frequency_hz = numbers[at].value * contents.options.hertz;
        const std::size_t line = numbers[at].line;
        const bool falls = !data.frequency_hz.empty() && frequency_hz <= data.frequency_hz.back();
        if (falls && ports == 2) break;  // noise data start with a frequency that does not ascend
        if (falls) bad(file_name, line, "frequencies must ascend");
        if (frequency_hz < 0 || !std::isfinite(frequency_hz))
            bad(file_name, line, "a frequency below zero or beyond all bounds");
        if (at + record > numbers.size())
            bad(file_name, contents.last_line,
                "the file ends inside the data of one frequency: " +
                    std::to_string(numbers.size() - at) + " numbers where " +
                    std::to_string(record) + " are needed");
        std::vector<Complex> row(entries);
        for (std::size_t i = 0; i < entries; ++i) {
            row[i] = complex_of(contents.options.pair, numbers[at + 1 + 2 * i].value,
                                numbers[at + 2 + 2 * i].value);
            if (!(std::abs(row[i]) < 1e6)) bad(file_name, line, "a scattering parameter above 1e6");
        }
        if (ports == 2) std::swap(row[1], row[2]);  // S11 S21 S12 S22 in the file
        data.frequency_hz.push_back(frequency_hz);
        data.s.push_back(std::move(row));
    }
    if (data.frequency_hz.size() < 2)
        bad(file_name, contents.last_line, "at least two frequencies are needed");
    return data;
}

Touchstone read_touchstone(const std::string& path) {
    const std::string name = lower_case(path);
    std::size_t ports = 0;
    if (name.ends_with(".s2p")) ports = 2;
    if (name.ends_with(".s4p")) ports = 4;
    if (ports == 0)
        throw BadData(path + ":0: the name must end in .s2p or .s4p, which tells the ports");
    std::ifstream file(path, std::ios::binary);
    if (!file) throw BadData(path + ":0: the file cannot be opened");
    std::ostringstream text;
    text << file.rdbuf();
    if (file.bad()) throw BadData(path + ":0: the file cannot be read");
    return parse_touchstone(text.str(), path, ports);
}

}  // namespace lanewright::sim
