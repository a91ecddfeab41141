#pragma once
// Purpose:   stored words for small enumerations: one table a type, both directions.
// Ownership: none. Threads: no shared state.

#include <array>
#include <string>
#include <string_view>
#include <utility>

#include "daemon/store/store_error.hpp"

namespace lanewright {

template <class E, std::size_t N>
struct Words {
    std::array<std::pair<E, const char*>, N> entries;

    const char* name(E value) const {
        for (const auto& [entry, word] : entries) {
            if (entry == value) return word;
        }
        return "unknown";
    }
    E value(std::string_view text) const {
        for (const auto& [entry, word] : entries) {
            if (text == word) return entry;
        }
        throw BadStoreData("the store holds the word \"" + std::string(text) +
                           "\", which this version does not know");
    }
};

template <class E, std::size_t N>
constexpr Words<E, N> words(const std::pair<E, const char*> (&entries)[N]) {
    return [&]<std::size_t... I>(std::index_sequence<I...>) {
        return Words<E, N>{{entries[I]...}};
    }(std::make_index_sequence<N>());
}

}  // namespace lanewright
