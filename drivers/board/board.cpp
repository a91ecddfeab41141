#include "drivers/board/board.hpp"

#include <random>
#include <utility>

#include "drivers/dialects/dialect.hpp"

namespace lanewright {

namespace {

std::chrono::nanoseconds nanoseconds_of(double seconds) {
    return std::chrono::duration_cast<std::chrono::nanoseconds>(
        std::chrono::duration<double>(seconds));
}

SessionOptions options_of(const BoardFile& file) {
    SessionOptions options;
    options.board = file.name;
    options.answer_time = nanoseconds_of(file.dialect.deadline_ms * 1e-3);
    options.attempts = file.dialect.attempts;
    options.patience = nanoseconds_of(file.dialect.patience_s);
    return options;
}

// A field that cannot be read leaves the batch empty; open_board has refused it by then.
IdentityProbe probe_of(const IdentityCheck& identity) {
    IdentityProbe probe;
    if (Result<Batch> batch = identity.batch()) probe.batch = std::move(*batch);
    probe.check = [&identity](const BatchReply& reply) -> Result<void> {
        const Result<Identity> found = identity.identity(reply);
        if (!found) return found.error();
        return {};
    };
    return probe;
}

Fault bad_config(const BoardFile& file, std::string what, std::string hint) {
    Fault fault;
    fault.cause = Cause::bad_config;
    fault.what = std::move(what);
    fault.board = file.name;
    fault.hint = std::move(hint);
    return fault;
}

// Parameters of coroutines are values: references of a caller may be gone when one goes on.
Task<std::unique_ptr<Board>> open_one(BoardFile file, std::unique_ptr<Link> link, TimeSource* time,
                                      std::optional<std::uint32_t> session_number) {
    const DialectEntry* entry = find_dialect(file.dialect.name);
    if (entry == nullptr) {
        std::string known;
        for (const DialectEntry& each : dialects()) {
            known += known.empty() ? "" : ", ";
            known += each.name;
        }
        co_return bad_config(file, "no dialect is called \"" + file.dialect.name + "\"",
                             "Known dialects: " + known);
    }
    const RegisterMap map(file);
    const Result<Batch> readable = IdentityCheck(map, file.identity).batch();
    if (!readable) co_return bad_config(file, readable.error().what, "");
    DialectOptions options;
    options.session = session_number.value_or(std::random_device{}());
    options.answer_time = nanoseconds_of(file.dialect.deadline_ms * 1e-3);
    std::unique_ptr<Dialect> dialect = entry->make(options);
    if (!dialect->traits().tells_reset && !file.sentinel) {
        co_return bad_config(file,
                             "the dialect " + file.dialect.name +
                                 " cannot tell a reset, and the board file names no sentinel",
                             "Name a scratch field that a reset clears as \"sentinel\"");
    }
    auto board =
        std::make_unique<Board>(std::move(file), std::move(link), std::move(dialect), *time);
    const Result<void> opened = co_await board->open();
    if (!opened) co_return opened.error();
    co_return std::move(board);
}

}  // namespace

Board::Board(BoardFile file, std::unique_ptr<Link> link, std::unique_ptr<Dialect> dialect,
             TimeSource& time)
    : time_(time),
      file_(std::move(file)),
      map_(file_),
      identity_(map_, file_.identity),
      session_(time, std::move(link), std::move(dialect), options_of(file_), probe_of(identity_)),
      reader_(file_, map_, session_, time) {}

Task<std::unique_ptr<Board>> open_board(BoardFile file, std::unique_ptr<Link> link,
                                        TimeSource& time,
                                        std::optional<std::uint32_t> session_number) {
    return open_one(std::move(file), std::move(link), &time, session_number);
}

}  // namespace lanewright
