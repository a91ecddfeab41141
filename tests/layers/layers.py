#!/usr/bin/env python3
"""Holds every #include of the tree to the table of who may include whom.

usage: layers.py ROOT            check the tree; prints each forbidden include, exit 1 if any
       layers.py ROOT --planted  plant forbidden includes in a copy and see each of them found

A folder of the table is one layer; a file belongs to the longest folder that holds it. Own files
may include their own layer, and the layers and libraries listed for it, nothing else. A file that
belongs to no layer, and a cycle between files or layers, are found too.
"""

import os
import re
import shutil
import sys
import tempfile

TOP_FOLDERS = ("adapt", "drivers", "sim_target", "daemon")
EVERY_ADAPT = ["adapt/values", "adapt/stats", "adapt/margin", "adapt/search"]
EVERY_DRIVER = ["drivers/faults", "drivers/config", "drivers/registers", "drivers/io",
                "drivers/dialects", "drivers/board"]
DAEMON_COMMON = EVERY_ADAPT + EVERY_DRIVER
DAEMON_LIBRARIES = ["system", "asio", "json", "spdlog", "openssl", "posix"]

# Layer: the layers it may include beside itself, and the libraries beside the standard one.
TABLE = {
    "adapt/values": ([], []),
    "adapt/stats": (["adapt/values"], []),
    "adapt/margin": (["adapt/values", "adapt/stats"], []),
    "adapt/search": (["adapt/values", "adapt/stats"], ["eigen"]),
    "drivers/faults": (["adapt/values"], ["system"]),
    "drivers/config": (["drivers/faults"], ["json"]),
    "drivers/registers": (["drivers/faults", "drivers/config"], []),
    "drivers/io": (["drivers/faults"], ["asio", "system", "spdlog", "posix"]),
    "drivers/dialects": (["drivers/faults", "drivers/config", "drivers/registers"], ["crc"]),
    "drivers/board": (EVERY_DRIVER + ["adapt/values", "adapt/stats", "adapt/margin"],
                      ["asio", "system", "spdlog"]),
    "sim_target": (["drivers/config", "drivers/io", "drivers/faults"],
                   ["eigen", "asio", "system", "json", "crc", "spdlog", "posix"]),
    "daemon/store": (DAEMON_COMMON, DAEMON_LIBRARIES + ["sqlite"]),
    "daemon/engine": (DAEMON_COMMON + ["daemon/store"], DAEMON_LIBRARIES),
    "daemon/replay": (DAEMON_COMMON + ["daemon/store", "daemon/engine"], DAEMON_LIBRARIES),
    "daemon/views": (DAEMON_COMMON + ["daemon/store", "daemon/engine", "daemon/replay"],
                     DAEMON_LIBRARIES),
    "daemon/service": (DAEMON_COMMON + ["daemon/store", "daemon/engine", "daemon/replay",
                                        "daemon/views"], DAEMON_LIBRARIES),
    "daemon/cli": (DAEMON_COMMON + ["daemon/store", "daemon/engine", "daemon/replay",
                                    "daemon/views", "daemon/service"],
                   DAEMON_LIBRARIES + ["cli11"]),
}

# Which library a header belongs to; the first match counts.
LIBRARIES = [
    (re.compile(r"lanewright_build\.hpp$"), "build time"),
    (re.compile(r"boost/asio(/|\.hpp)"), "asio"),
    (re.compile(r"boost/beast(/|\.hpp)"), "beast"),
    (re.compile(r"boost/system/"), "system"),
    (re.compile(r"boost/crc\.hpp"), "crc"),
    (re.compile(r"boost/"), "other boost"),
    (re.compile(r"nlohmann/"), "json"),
    (re.compile(r"spdlog/"), "spdlog"),
    (re.compile(r"(Eigen|unsupported/Eigen)/"), "eigen"),
    (re.compile(r"SQLiteCpp/|sqlite3\.h"), "sqlite"),
    (re.compile(r"CLI/"), "cli11"),
    (re.compile(r"openssl/"), "openssl"),
    (re.compile(r"(sys|linux|asm|arpa|netinet|net)/|[a-z0-9_]+\.h$"), "posix"),
    (re.compile(r"[a-z_]+$"), "standard"),
]

# Libraries that only these files may include, whatever their layer says.
ONLY_IN_SOURCES = {"spdlog"}
EXTRA_FILES = {"sim_target/main.cpp": {"cli11"}, "daemon/engine/version.cpp": {"build time"}}

INCLUDE = re.compile(r'^[ \t]*#[ \t]*include[ \t]*(["<])([^">]+)[">]', re.MULTILINE)


def layer_of(path):
    fits = [layer for layer in TABLE if path.startswith(layer + "/")]
    return max(fits, key=len) if fits else None


def library_of(header):
    for pattern, library in LIBRARIES:
        if pattern.match(header):
            return library
    return "unknown library"


def without_comments(text):
    """Comments blanked, line numbers kept."""
    blank = lambda match: re.sub(r"[^\n]", " ", match.group(0))
    return re.sub(r"/\*.*?\*/|(?<!:)//[^\n]*", blank, text, flags=re.DOTALL)


def sources(root):
    for top in TOP_FOLDERS:
        for folder, _, names in os.walk(os.path.join(root, top)):
            for name in sorted(names):
                if name.endswith((".hpp", ".cpp", ".h", ".cc", ".ipp")):
                    yield os.path.relpath(os.path.join(folder, name), root)


def own_path(root, path, header, quote):
    """The file of ours that an include names, or None for a library's."""
    if header.split("/")[0] in TOP_FOLDERS + ("tests",):
        return header
    beside = os.path.normpath(os.path.join(os.path.dirname(path), header))
    if quote == '"' and os.path.exists(os.path.join(root, beside)):
        return beside
    return None


def check_own(path, target, layer):
    other = layer_of(target)
    if other is None:
        return f"includes {target}, which no layer owns"
    if other != layer and other not in TABLE[layer][0]:
        return f"includes {target}: {layer} may not use {other}"
    return None


def check_library(path, header, layer):
    library = library_of(header)
    # <errno.h> and its like are the C library's, and as free as the standard library.
    if library == "standard":
        return None
    if library not in set(TABLE[layer][1]) | EXTRA_FILES.get(path, set()):
        return f"includes <{header}>: {layer} may not use {library}"
    if library in ONLY_IN_SOURCES and not path.endswith(".cpp"):
        return f"includes <{header}>: {library} belongs in .cpp files"
    return None


def first_cycle(graph):
    """One cycle of a {node: set of nodes}, as a list, or None. No recursion."""
    state = {}
    for start in sorted(graph):
        if start in state:
            continue
        trail = [(start, iter(sorted(graph[start])))]
        state[start] = "open"
        while trail:
            node, rest = trail[-1]
            following = next(rest, None)
            if following is None:
                state[node] = "done"
                trail.pop()
            elif state.get(following) == "open":
                names = [name for name, _ in trail]
                return names[names.index(following):] + [following]
            elif following in graph and following not in state:
                state[following] = "open"
                trail.append((following, iter(sorted(graph[following]))))
    return None


def check(root):
    problems = []
    files, layers = {}, {layer: set() for layer in TABLE}
    for path in sources(root):
        layer = layer_of(path)
        if layer is None:
            problems.append(f"{path}:1: belongs to no layer of the table")
            continue
        files[path] = set()
        with open(os.path.join(root, path), encoding="utf-8") as file:
            text = without_comments(file.read())
        for match in INCLUDE.finditer(text):
            quote, header = match.groups()
            line = text.count("\n", 0, match.start()) + 1
            target = own_path(root, path, header, quote)
            if target:
                problem = check_own(path, target, layer)
                files[path].add(target)
                if layer_of(target) not in (None, layer):
                    layers[layer].add(layer_of(target))
            else:
                problem = check_library(path, header, layer)
            if problem:
                problems.append(f"{path}:{line}: {problem}")
    for what, graph in (("files", files), ("layers", layers)):
        cycle = first_cycle(graph)
        if cycle:
            problems.append(f"a cycle of {what}: " + " -> ".join(cycle))
    if not files:
        problems.append(f"no sources below {root}")
    return problems


# (file to plant in, its text, what must be said of it)
PLANTED = [
    ("adapt/search/planted.cpp", '#include "drivers/board/lane_reader.hpp"', "drivers/board"),
    ("adapt/values/planted.hpp", '#include "adapt/stats/random.hpp"', "adapt/stats"),
    ("adapt/stats/planted.cpp", "#include <Eigen/Dense>", "eigen"),
    ("adapt/margin/planted.cpp", "#include <boost/asio.hpp>", "asio"),
    ("adapt/search/planted.hpp", "#  include <unistd.h>", "posix"),
    ("drivers/config/planted.cpp", '#include "drivers/registers/register_map.hpp"',
     "drivers/registers"),
    ("drivers/dialects/planted.cpp", "#include <boost/asio/ip/tcp.hpp>", "asio"),
    ("drivers/registers/planted.cpp", "#include <nlohmann/json.hpp>", "json"),
    ("drivers/io/planted.cpp", '#include "drivers/board/lane_reader.hpp"', "drivers/board"),
    ("drivers/io/planted.hpp", "#include <spdlog/spdlog.h>", ".cpp files"),
    ("drivers/board/planted.cpp", '#include "adapt/search/procedure.hpp"', "adapt/search"),
    ("drivers/board/planted_too.cpp", "#include <SQLiteCpp/SQLiteCpp.h>", "sqlite"),
    ("sim_target/planted.cpp", '#include "drivers/dialects/framed.hpp"', "drivers/dialects"),
    ("sim_target/planted_too.cpp", '#include "adapt/values/values.hpp"', "adapt/values"),
    ("sim_target/planted.hpp", "#include <CLI/CLI.hpp>", "cli11"),
    ("daemon/store/planted.cpp", '#include "daemon/engine/recipe.hpp"', "daemon/engine"),
    ("daemon/engine/planted.cpp", "#include <sqlite3.h>", "sqlite"),
    ("daemon/views/planted.cpp", '#include "../cli/main.hpp"\n#include "daemon/cli/x.hpp"',
     "daemon/cli"),
    ("daemon/cli/planted.cpp", "#include <boost/beast.hpp>", "beast"),
    ("daemon/engine/planted.hpp", '#include "sim_target/target_file.hpp"', "sim_target"),
    ("daemon/planted.cpp", "", "belongs to no layer"),
    ("adapt/values/ring_a.hpp", '#include "adapt/values/ring_b.hpp"', None),
    ("adapt/values/ring_b.hpp", '#include "adapt/values/ring_a.hpp"', "a cycle of files"),
]
HARMLESS = ("adapt/values/harmless.hpp",
            "// #include <boost/asio.hpp>\n/* #include <sqlite3.h>\n*/\n#include <vector>\n")


def plant(root):
    """Plants all of PLANTED in a copy of the tree; what was not found, and what was found too."""
    failures = []
    with tempfile.TemporaryDirectory() as copy:
        for top in TOP_FOLDERS:
            shutil.copytree(os.path.join(root, top), os.path.join(copy, top))
        before = set(check(copy))
        for path, text, _ in PLANTED + [HARMLESS + (None,)]:
            os.makedirs(os.path.dirname(os.path.join(copy, path)), exist_ok=True)
            with open(os.path.join(copy, path), "w", encoding="utf-8") as file:
                file.write("#pragma once\n" + text + "\n")
        found = set(check(copy)) - before
    for path, text, expected in PLANTED:
        if expected is None:
            continue
        hits = [problem for problem in found
                if expected in problem and (path in problem or expected.startswith("a cycle"))]
        if not hits:
            failures.append(f"not found: {text!r} in {path}")
    failures += [f"found without cause: {problem}" for problem in found
                 if HARMLESS[0] in problem]
    print(f"{len(PLANTED)} planted, {len(found)} problems found")
    return failures


def main():
    if len(sys.argv) not in (2, 3) or sys.argv[2:] not in ([], ["--planted"]):
        print(__doc__, file=sys.stderr)
        return 64
    root = sys.argv[1]
    problems = plant(root) if sys.argv[2:] else check(root)
    for problem in problems:
        print(problem)
    return 1 if problems else 0


if __name__ == "__main__":
    sys.exit(main())
