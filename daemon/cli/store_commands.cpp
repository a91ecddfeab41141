#include <unistd.h>

#include <fstream>
#include <nlohmann/json.hpp>

#include "daemon/cli/commands.hpp"
#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/views/run_json.hpp"
#include "daemon/views/run_text.hpp"

namespace lanewright {

namespace {

std::string path_or_default(const std::string& path) {
    return path.empty() ? default_store_path() : path;
}

std::string json_text(const nlohmann::ordered_json& value) {
    return value.dump(2, ' ', false, nlohmann::json::error_handler_t::replace) + "\n";
}

std::string exported(const RunView& view, const std::string& format) {
    if (format == "csv") return readings_csv(view);
    if (format == "writes") return register_writes(view);
    return json_text(run_json(view));
}

Result<void> write_file(const std::string& path, const std::string& text) {
    std::ofstream out(path, std::ios::binary | std::ios::trunc);
    out << text;
    out.flush();
    if (out) return {};
    Fault fault;
    fault.cause = Cause::io;
    fault.what = "cannot write " + path;
    fault.hint = "Check the folder, its permissions and the room on the disk";
    return fault;
}

}  // namespace

int run_runs(const StoreOptions& options) {
    try {
        const Database database(path_or_default(options.store_path), Database::Mode::read_only);
        std::vector<RunView> views;
        for (const RunRow& row : database.runs()) views.push_back(view_of(row, database));
        if (!options.json) {
            print(views.empty() ? "no run yet\n" : runs_table(views));
            return exit_ok;
        }
        nlohmann::ordered_json out = nlohmann::ordered_json::array();
        for (const RunView& view : views) out.push_back(run_summary_json(view));
        print(json_text(out));
        return exit_ok;
    } catch (const StoreError& error) {
        return report(error.fault(), options.json);
    }
}

int run_show(const StoreOptions& options) {
    try {
        const Database database(path_or_default(options.store_path), Database::Mode::read_only);
        const RunView view = view_of(database.find_run(options.run), database);
        print(options.json ? json_text(run_json(view))
                           : run_account(view, may_colour(STDOUT_FILENO)));
        return exit_ok;
    } catch (const StoreError& error) {
        return report(error.fault(), options.json);
    }
}

int run_export(const ExportOptions& options) {
    try {
        const Database database(path_or_default(options.store_path), Database::Mode::read_only);
        const RunView view = view_of(database.find_run(options.run), database);
        const std::string text = exported(view, options.format);
        if (options.out_path.empty()) {
            print(text);
            return exit_ok;
        }
        if (auto written = write_file(options.out_path, text); !written) {
            return report(written.error(), false);
        }
        return exit_ok;
    } catch (const StoreError& error) {
        return report(error.fault(), false);
    }
}

}  // namespace lanewright
