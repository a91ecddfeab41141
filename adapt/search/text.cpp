#include "adapt/search/text.hpp"

#include <algorithm>
#include <array>
#include <charconv>

namespace lanewright {
namespace {

std::string written(double value, std::chars_format format, int digits) {
    std::array<char, 400> buffer{};  // the largest double has 309 digits before the point
    const auto end = std::to_chars(buffer.data(), buffer.data() + buffer.size(), value, format,
                                   std::clamp(digits, 0, 40));
    return std::string(buffer.data(), end.ptr);
}

}  // namespace

std::string fixed(double value, int digits) {
    return written(value, std::chars_format::fixed, digits);
}

std::string general(double value, int digits) {
    return written(value, std::chars_format::general, digits);
}

std::string text_of(const CodeSpace& space, const Codes& codes) {
    std::string text;
    for (std::size_t i = 0; i < codes.value.size(); ++i) {
        if (!text.empty()) text += ' ';
        if (i < space.dimensions().size()) text += space.dimensions()[i].name + '=';
        text += std::to_string(codes.value[i]);
    }
    return text;
}

}  // namespace lanewright
