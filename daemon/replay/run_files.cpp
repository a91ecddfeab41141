#include "daemon/replay/run_files.hpp"

#include <utility>

#include "daemon/replay/columns.hpp"
#include "daemon/store/store_error.hpp"

namespace lanewright {

namespace {

template <class T, class Decode>
T decoded(const SourceFile& file, const Decode& decode) {
    Complaints complaints;
    std::optional<T> out;
    if (auto document = Document::parse(file.text, file.path, complaints)) {
        out = decode(*document, complaints);
    }
    if (!out || complaints.any()) {
        throw BadStoreData("the run's copy of " + file.path + " cannot be read by this version:\n" +
                           complaints.text());
    }
    return std::move(*out);
}

BoardFile board_of(const Manifest& manifest) {
    if (manifest.imported && manifest.board_file.text.empty()) {
        ColumnMap columns = decoded<ColumnMap>(manifest.imported->columns, decode_columns);
        if (columns.board) return std::move(*columns.board);
    }
    return decoded<BoardFile>(manifest.board_file, [](const Document& document, Complaints& all) {
        return decode_board_file(document, all);
    });
}

}  // namespace

RunFiles files_of(const Manifest& manifest) {
    RunFiles files;
    files.board = board_of(manifest);
    if (manifest.imported) {
        files.recipe.name = manifest.recipe;
        for (const DimensionDescription& dimension : files.board.dimensions) {
            files.recipe.dimensions.push_back(dimension.name);
        }
        return files;
    }
    files.recipe = decoded<Recipe>(manifest.recipe_file, decode_recipe);
    return files;
}

}  // namespace lanewright
