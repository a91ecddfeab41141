#include <algorithm>
#include <array>

#include "drivers/dialects/dialect.hpp"
#include "drivers/dialects/framed.hpp"

namespace lanewright {

namespace {

template <class T>
std::unique_ptr<Dialect> make(const DialectOptions& options) {
    return std::make_unique<T>(options);
}

constexpr std::array all_dialects{
    DialectEntry{"framed", make<framed::Framed>},
};

}  // namespace

std::span<const DialectEntry> dialects() {
    return all_dialects;
}

const DialectEntry* find_dialect(std::string_view name) {
    const auto found = std::find_if(all_dialects.begin(), all_dialects.end(),
                                    [name](const DialectEntry& each) { return each.name == name; });
    return found == all_dialects.end() ? nullptr : &*found;
}

}  // namespace lanewright
