"""A bench for tests that drive the built programs: temporary folders, a simulated board, the verbs.

Python's standard library only. The build folder comes from LANEWRIGHT_BUILD (set by ctest).
"""

import csv
import fcntl
import io
import json
import os
import pathlib
import pty
import re
import shutil
import signal
import struct
import subprocess
import tempfile
import termios
import threading
import time

SOURCE = pathlib.Path(__file__).resolve().parents[2]
BUILD = pathlib.Path(os.environ.get("LANEWRIGHT_BUILD", SOURCE / "build" / "dev"))
LANEWRIGHT = BUILD / "daemon" / "lanewright"
TARGET = BUILD / "sim_target" / "lanewright-target"
CRASH_RUNNER = BUILD / "tests" / "crash" / "crash_runner"


class Target:
    """A lanewright-target process; `tcp` is HOST:PORT, `pty` the link's path."""

    def __init__(self, bench, tcp=True, pty=False, port=0, changes=None):
        self.bench = bench
        description = json.loads((SOURCE / "configs/targets/demo.json").read_text())
        description["time_scale"] = 0
        description["board"] = str(SOURCE / "configs/boards/demo.json")
        for key, value in (changes or {}).items():
            description[key] = value
        path = bench.path("target.json")
        path.write_text(json.dumps(description))
        command = [str(TARGET), "serve", "--target", str(path)]
        if tcp:
            command += ["--tcp", f"127.0.0.1:{port}"]
        if pty:
            command += ["--pty", str(bench.path("board.tty"))]
        self.log = open(bench.path("target.log"), "ab")
        self.process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=self.log)
        line = self.process.stdout.readline()
        if not line:
            raise RuntimeError("the target did not start: "
                               + bench.path("target.log").read_text())
        ready = json.loads(line)
        assert ready["ready"] is True
        self.tcp = ready["tcp"][0] if tcp else None
        self.pty = ready["pty"][0] if pty else None

    @property
    def link(self):
        return f"tcp:{self.tcp}" if self.tcp else f"serial:{self.pty}"

    @property
    def port(self):
        return int(self.tcp.rsplit(":", 1)[1])

    def stop(self):
        if self.process.poll() is None:
            self.process.send_signal(signal.SIGTERM)
            try:
                self.process.wait(timeout=10)
            except subprocess.TimeoutExpired:
                self.process.kill()
                self.process.wait()
        self.process.stdout.close()
        self.log.close()

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.stop()


class Bench:
    """A temporary folder with its own state and lock folders."""

    def __init__(self):
        self.folder = pathlib.Path(tempfile.mkdtemp(prefix="lanewright-"))
        self.environment = dict(os.environ,
                                XDG_STATE_HOME=str(self.folder / "state"),
                                LANEWRIGHT_LOCK_DIR=str(self.folder / "locks"))
        self.board = SOURCE / "configs/boards/demo.json"
        self.recipe = SOURCE / "configs/recipes/demo.json"

    def path(self, name):
        return self.folder / name

    def changed(self, source, name, change):
        """A copy of a JSON file after change(object)."""
        value = json.loads(pathlib.Path(source).read_text())
        change(value)
        path = self.path(name)
        path.write_text(json.dumps(value, indent=1))
        return path

    def run(self, *words, timeout=120, program=LANEWRIGHT, **options):
        return subprocess.run([str(program), *map(str, words)], env=self.environment,
                              capture_output=True, text=True, timeout=timeout, **options)

    def start(self, *words, program=LANEWRIGHT):
        return subprocess.Popen([str(program), *map(str, words)], env=self.environment,
                                stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)

    def on_terminal(self, *words, columns=80, environment=None, timeout=60):
        """Runs a verb whose output goes to a terminal; its exit code and all it printed there."""
        ours, theirs = pty.openpty()
        fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 25, columns, 0, 0))
        running = subprocess.Popen([str(LANEWRIGHT), *map(str, words)], stdin=subprocess.DEVNULL,
                                   stdout=theirs, stderr=theirs,
                                   env={**self.environment, "TERM": "xterm", **(environment or {})})
        os.close(theirs)
        printed = bytearray()

        def drain():
            try:
                while data := os.read(ours, 65536):
                    printed.extend(data)
            except OSError:  # how Linux says that the other end was closed
                pass

        reader = threading.Thread(target=drain)
        reader.start()
        try:
            code = running.wait(timeout)
        finally:
            running.kill()
            reader.join()
            os.close(ours)
        return code, printed.decode()

    def tune_words(self, link, *more, store=None, recipe=None, board=None):
        return ["tune", "--board", board or self.board, "--recipe", recipe or self.recipe,
                "--link", link, "--store", store or self.path("store.db"), *more]

    def tune(self, link, *more, timeout=120, **files):
        done = self.run(*self.tune_words(link, "--json", *more, **files), timeout=timeout)
        try:
            return done.returncode, json.loads(done.stdout), done.stderr
        except json.JSONDecodeError as error:
            raise AssertionError(f"stdout is no JSON object: {done.stdout!r}\n"
                                 f"{done.stderr}") from error

    def readings(self, run="latest", store=None, all_stages=False):
        """The strategies' readings of a run as rows, without what differs between equal runs: a
        reset costs one more look at the reference."""
        done = self.run("export", "--store", store or self.path("store.db"), run, "--as", "csv")
        assert done.returncode == 0, done.stderr
        rows = [row for row in csv.DictReader(io.StringIO(done.stdout))
                if all_stages or row["stage"] in ("search", "compare")]
        for row in rows:
            del row["run"], row["time"]
            row.pop("lock_losses", None)  # the chip counts anew after a reset
        return sorted(rows, key=lambda row: (int(row["lane"]), int(row["ordinal"])))

    def codes_on_board(self, link):
        """What stands in the tuned fields of all lanes, read by a dry run, by lane."""
        done = self.run("tune", "--board", self.board, "--recipe", SOURCE
                        / "configs/recipes/demo.json", "--link", link, "--dry-run", "--json")
        assert done.returncode == 0, done.stderr
        out = {}
        for lane in json.loads(done.stdout)["lanes"]:
            out[lane["lane"]] = {field["register"][3:].lower(): field["present"]
                                 for field in lane["may_write"]
                                 if field["register"].startswith("EQ_R")
                                 or field["register"].startswith("EQ_C")}
        return out

    def close(self):
        shutil.rmtree(self.folder, ignore_errors=True)

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.close()


ESCAPE = re.compile(r"\x1b\[[0-9;?]*[A-Za-z]")


def too_wide(text, columns=80):
    """The lines of a terminal's output that are wider than it, colours and moves left out."""
    lines = re.split(r"[\r\n]+", ESCAPE.sub("", text))
    return [line for line in lines if len(line) > columns]


def decisions(result):
    return {lane["lane"]: (lane["outcome"], lane["codes"]) for lane in result["lanes"]}


def wait_until(condition, seconds=20):
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if condition():
            return True
        time.sleep(0.02)
    return False
