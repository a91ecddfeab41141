"""What goes wrong on a bench: wrong boards, ports in use, silence, garbage, lost cables, resets,
signals, full disks. The run completes as if nothing had happened, or ends with the right exit code
and the board as it was, at the latest at the next contact.
"""

import json
import os
import pathlib
import signal
import subprocess
import sys
import time
import unittest

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
from framed_host import Host  # noqa: E402
from wire_tap import Tap  # noqa: E402
from workbench import Bench, Target, decisions, wait_until  # noqa: E402

SLOW = 0.15  # share of real dwell: a run takes about 2 s and can be caught half-way

# Codes that an engineer left on the board: not those after a reset.
BY_HAND = {"r1": 20, "r2": 5, "c1": 6, "c2": 2}
ADDRESS = {"r1": (0, 0x1F), "c1": (1, 0xF), "r2": (2, 0xF), "c2": (3, 7)}


def write_by_hand(tcp):
    """Puts BY_HAND on all lanes, as somebody with a console would."""
    with Host(tcp) as host:
        for lane in range(8):
            for name, code in BY_HAND.items():
                address, mask = ADDRESS[name]
                host.write(0x100 + 0x40 * lane + address, mask, code)
            host.write(0x100 + 0x40 * lane + 4, 1, 1)


class WithBench(unittest.TestCase):
    def setUp(self):
        self.bench = Bench()
        self.addCleanup(self.bench.close)
        self.store = self.bench.path("store.db")

    def be_impatient(self):
        """A lost link or silence ends a run after 3 s instead of 20."""
        self.bench.board = self.bench.changed(
            self.bench.board, "impatient.json",
            lambda board: board["dialect"].update(patience_s=3, attempts=2))

    def board(self, **changes):
        """A simulated board, stopped at the end of the test."""
        target = Target(self.bench, changes=changes)
        self.addCleanup(target.stop)
        return target

    def tap(self, target):
        tap = Tap(target.tcp)
        self.addCleanup(tap.close)
        return tap

    undisturbed_run = None

    @classmethod
    def undisturbed(cls):
        """Decisions and readings of the same job on a board without faults; run once."""
        if WithBench.undisturbed_run is None:
            with Bench() as bench, Target(bench) as target:
                code, result, said = bench.tune(target.link)
                assert code == 0, said
                WithBench.undisturbed_run = decisions(result), bench.readings()
        return WithBench.undisturbed_run

    def check(self, link):
        done = self.bench.run("check", "--board", self.bench.board, "--link", link, "--json",
                              timeout=60)
        return done.returncode, json.loads(done.stdout), done.stderr

    def reading_count(self, store=None):
        """How many readings of strategies the store has of its latest run, asked while the run
        goes on."""
        done = self.bench.run("show", "--store", store or self.store, "latest", "--json")
        if done.returncode != 0:
            return 0
        return sum(lane["reading_count"] - lane["side_reading_count"]
                   for lane in json.loads(done.stdout)["lanes"])

    def started(self, link, *words, readings=40, store=None):
        """A tune that goes on by itself, caught with at least so many readings stored."""
        running = self.bench.start(*self.bench.tune_words(link, "--json", *words, store=store))
        self.addCleanup(self.end, running)
        self.assertTrue(wait_until(lambda: running.poll() is not None
                                   or self.reading_count(store) >= readings))
        self.assertIsNone(running.poll(), "it ended before it could be disturbed")
        return running

    def end(self, running):
        if running.poll() is None:
            running.kill()
        running.communicate()


class WrongOrBusyBoard(WithBench):
    def test_wrong_board_on_the_right_port(self):
        """Another chip on the right port is refused before any write, by every verb."""
        tap = self.tap(self.board(faults={"wrong_identity": {"CHIP_ID.value": 0x12345678}}))
        code, result, said = self.bench.tune(tap.link)
        self.assertEqual(code, 78, said)
        self.assertEqual(result["error"]["cause"], "wrong board")
        self.assertIn("chip", said)
        code, result, said = self.check(tap.link)
        self.assertEqual(code, 78, said)
        self.assertGreater(tap.frames, 2)
        self.assertEqual(tap.writes, [])

    def test_two_processes_one_board(self):
        """A board in use is refused with 75, naming pid and run, whatever the verb or the name."""
        target = self.board(time_scale=0.2)
        running = self.started(target.link)
        for link in (target.link, f"tcp:localhost:{target.port}"):
            done = self.bench.run(*self.bench.tune_words(link, "--json",
                                                         store=self.bench.path("second.db")))
            self.assertEqual(done.returncode, 75, done.stderr)
            self.assertIn(f"process {running.pid}", json.loads(done.stdout)["error"]["what"])
            self.assertIn("run 2", done.stderr)
        code, result, said = self.check(target.link)
        self.assertEqual((code, result["error"]["cause"]), (75, "busy"), said)
        self.assertIsNone(running.poll())

    def test_two_processes_one_store(self):
        """A store in use by a run on another board is refused with 75, naming the pid."""
        first, second = self.board(time_scale=0.2), self.board()
        running = self.started(first.link)
        code, result, said = self.bench.tune(second.link)
        self.assertEqual(code, 75, said)
        self.assertIn(f"process {running.pid}", result["error"]["what"])
        self.assertIn("store", result["error"]["what"])

    def test_serial_port_held_by_another_program(self):
        """A serial port that another program has locked is refused with 75, naming its pid."""
        with Target(self.bench, tcp=False, pty=True) as target:
            holder = subprocess.Popen(
                [sys.executable, "-c", "import fcntl, os, sys\n"
                 "port = os.open(sys.argv[1], os.O_RDWR | os.O_NOCTTY)\n"
                 "fcntl.flock(port, fcntl.LOCK_EX)\nprint('held', flush=True)\nsys.stdin.read()",
                 target.pty], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
            try:
                self.assertEqual(holder.stdout.readline(), "held\n")
                code, result, said = self.bench.tune(target.link)
                self.assertEqual(code, 75, said)
                self.assertIn(str(holder.pid), result["error"]["what"])
            finally:
                holder.communicate("")
            self.assertEqual(self.check(target.link)[0], 0)


class SilenceAndNoise(WithBench):
    def test_silent_board(self):
        """A board that says nothing ends with 69; the message says how long and how often."""
        target = self.board(faults={"silent_from_frame": 1})
        begin = time.monotonic()
        code, result, said = self.check(target.link)
        self.assertEqual(code, 69, said)
        self.assertRegex(said, r"\d+ ms")
        self.assertRegex(said, r"attempt (\d+) of \1,")
        self.assertLess(time.monotonic() - begin, 30)

    def test_board_that_answers_garbage(self):
        """A board that answers garbage ends with 69 and is not written to."""
        self.be_impatient()
        tap = self.tap(self.board(faults={"garbage_from_frame": 1, "seed": 5}))
        code, result, said = self.bench.tune(tap.link)
        self.assertEqual(code, 69, said)
        self.assertEqual(tap.writes, [])

    def test_silence_in_mid_run(self):
        """Silence in mid-run ends with 69; the next contact writes the former codes first."""
        self.be_impatient()
        target = self.board(time_scale=SLOW)
        write_by_hand(target.tcp)
        former = self.bench.codes_on_board(target.link)
        self.assertEqual(former[3], BY_HAND)
        tap = self.tap(target)
        running = self.started(tap.link)
        tap.mute = True
        out, said = running.communicate(timeout=100)
        self.assertEqual(running.returncode, 69, said)
        self.assertIn("error", json.loads(out))
        self.assertNotEqual(self.bench.codes_on_board(target.link), former)
        tap.mute = False
        code, report, said = self.check(tap.link)
        self.assertEqual(code, 75, said)
        self.assertIsNotNone(report["restore_pending"])
        code, result, said = self.bench.tune(tap.link, "--lanes", "0",
                                             store=self.bench.path("another.db"))
        self.assertEqual(code, 0, said)
        self.assertIn("left codes to restore", said)
        now = self.bench.codes_on_board(target.link)
        self.assertEqual({lane: now[lane] for lane in range(1, 8)},
                         {lane: former[lane] for lane in range(1, 8)})
        self.assertEqual(result["lanes"][0]["former_codes"], former[0])

    def test_one_percent_of_frames_and_a_reset(self):
        """With 1 % of frames flipped, cut, doubled or late, and a reset, nothing changes."""
        calm, readings = self.undisturbed()
        one = {"probability": 0.01, "direction": "both"}
        target = self.board(faults={"seed": 11, "flip": one, "cut": one, "twice": one,
                                    "late": {**one, "by_ms": 500},
                                    "reset": {"at_batches": [300], "when": "in_batch"}})
        code, result, said = self.bench.tune(target.link)
        self.assertEqual(code, 0, said)
        self.assertEqual(decisions(result), calm)
        self.assertEqual(self.bench.readings(), readings)
        link = result["link"]
        self.assertGreater(link["bad_frames"], 3)
        self.assertGreater(link["retries"], 5)
        self.assertEqual(link["resets"], 1)
        self.assertEqual(self.bench.codes_on_board(target.link),
                         {lane: codes for lane, (_, codes) in calm.items()})

    def test_several_resets(self):
        """A board that resets again and again, before and in batches, changes no decision."""
        calm, readings = self.undisturbed()
        for when in ("in_batch", "before_batch"):
            with self.subTest(when=when):
                store = self.bench.path(f"{when}.db")
                target = self.board(faults={"reset": {"at_batches": [40, 41, 150, 380, 381, 500],
                                                      "when": when}})
                code, result, said = self.bench.tune(target.link, store=store)
                self.assertEqual(code, 0, said)
                self.assertEqual(decisions(result), calm)
                self.assertEqual(self.bench.readings(store=store), readings)
                self.assertGreaterEqual(result["link"]["resets"], 3)
                self.assertIn("reset", said)
                self.assertEqual(self.bench.codes_on_board(target.link),
                                 {lane: codes for lane, (_, codes) in calm.items()})

    def test_console_over_the_replies(self):
        """A console that prints over replies changes nothing."""
        calm, readings = self.undisturbed()
        target = self.board(faults={"console": {"text": "\r\nkernel: temperature 71 C\r\n",
                                                "probability": 0.2}})
        code, result, said = self.bench.tune(target.link)
        self.assertEqual(code, 0, said)
        self.assertEqual((decisions(result), self.bench.readings()), (calm, readings))
        self.assertGreater(result["link"]["bad_frames"], 10)


class BehindOurBack(WithBench):
    FOREIGN = {"lane": 7, "dimension": "r1", "code": 3}

    def test_the_reference_vouches_after_a_reset(self):
        """After a reset the lane's reference is read again before anything else counts."""
        target = self.board(faults={"reset": {"at_batches": [110], "when": "in_batch"}})
        code, result, said = self.bench.tune(target.link, "--lanes", "0")
        self.assertIn(code, (0, 1), said)
        self.assertEqual(result["link"]["resets"], 1)
        lane = result["lanes"][0]
        self.assertEqual(lane["reference"]["reset_count"], 1)
        self.assertTrue(any("reset" in note for note in lane["notes"]), lane["notes"])
        stages = [row["stage"] for row in self.bench.readings(all_stages=True)]
        self.assertGreater(stages.count("reference"), 0)

    def test_codes_changed_once(self):
        """Codes that something else changed once are written anew; the run completes."""
        target = self.board(failures={"foreign_writes": [{**self.FOREIGN, "at_batches": [100]}]})
        code, result, said = self.bench.tune(target.link, "--lanes", "7")
        self.assertIn(code, (0, 1), said)
        self.assertIn("EQ_R1.code", said)
        self.assertEqual(result["lanes"][0]["outcome"], "tuned")
        self.assertEqual(result["lanes"][0]["void_count"], 1)

    def test_codes_changed_again(self):
        """The second time the lane is given up by name, and nothing more is written to it."""
        target = self.board(failures={"foreign_writes": [
            {**self.FOREIGN, "at_batches": list(range(100, 140))}]})
        tap = self.tap(target)
        code, result, said = self.bench.tune(tap.link, "--lanes", "7")
        self.assertEqual(code, 1, said)
        lane = result["lanes"][0]
        self.assertEqual(lane["outcome"], "failed")
        self.assertEqual(lane["left"], "given_up")
        self.assertIn("something else writes EQ_R1.code", lane["reason"])
        self.assertEqual(lane["void_count"], 2)
        written = len(tap.writes)
        self.assertEqual(self.bench.codes_on_board(target.link)[7]["r1"], 3)
        code, report, said = self.check(tap.link)
        self.assertEqual(code, 0, said)
        self.assertIsNone(report["restore_pending"])
        lane_7 = range(0x100 + 7 * 0x40, 0x100 + 8 * 0x40)
        self.assertEqual([w for w in tap.writes[written:] if w[0] in lane_7], [])
        text = self.bench.run("show", "--store", self.store, "latest").stdout
        self.assertIn("given up: not restored", text)


class CableAndPower(WithBench):
    def test_cable_out_and_in_again(self):
        """A cable that is out for a while in mid-run changes nothing but the count."""
        calm, readings = self.undisturbed()
        target = self.board(faults={"drop": {"at_frame": 300, "back_after_ms": 700}})
        code, result, said = self.bench.tune(target.link)
        self.assertEqual(code, 0, said)
        self.assertEqual((decisions(result), self.bench.readings()), (calm, readings))
        self.assertGreaterEqual(result["link"]["reconnects"], 1)
        self.assertEqual(result["link"]["resets"], 0)

    def test_power_out_and_in_again(self):
        """A board that is switched off and on again in mid-run: what was read before is kept and
        the run completes. What is read afterwards may differ, as the simulated board that starts
        anew knows nothing of its drift before."""
        _, readings = self.undisturbed()
        target = self.board(time_scale=SLOW)
        running = self.started(target.link)
        port = target.port
        target.stop()
        time.sleep(0.5)
        before = self.bench.readings()
        self.assertGreaterEqual(len(before), 40)
        self.assertEqual([row for row in before if row not in readings], [])
        with Target(self.bench, port=port) as again:
            out, said = running.communicate(timeout=60)
            self.assertEqual(running.returncode, 0, said)
            result = json.loads(out)
            self.assertEqual(result["status"], "complete")
            after = self.bench.readings()
            self.assertEqual([row for row in before if row not in after], [])
            self.assertGreater(len(after), len(before))
            self.assertGreaterEqual(result["link"]["reconnects"], 1)
            self.assertGreaterEqual(result["link"]["resets"], 1)
            self.assertEqual({lane["outcome"] for lane in result["lanes"]}, {"tuned"})
            self.assertEqual(self.bench.codes_on_board(again.link),
                             {lane: codes for lane, (_, codes) in decisions(result).items()})
            code, report, said = self.check(again.link)
            self.assertEqual(code, 0, said)
            self.assertIsNone(report["restore_pending"])

    def test_power_out_for_good(self):
        """A board that stays away ends with 69; when it is back its former codes come first."""
        self.be_impatient()
        target = self.board(time_scale=SLOW)
        write_by_hand(target.tcp)
        running = self.started(target.link)
        port = target.port
        target.stop()
        out, said = running.communicate(timeout=100)
        self.assertEqual(running.returncode, 69, said)
        self.assertIn("run", json.loads(out))
        with Target(self.bench, port=port) as again:
            self.assertNotEqual(self.bench.codes_on_board(again.link)[3], BY_HAND)
            code, result, said = self.bench.tune(again.link)
            self.assertEqual(code, 0, said)
            self.assertIn("left codes to restore", said)
            self.assertIn("resuming run", said)
            self.assertEqual([lane["former_codes"] for lane in result["lanes"]], [BY_HAND] * 8)


class Interrupted(WithBench):
    def test_signals(self):
        """SIGTERM and SIGINT restore the codes and end with 75; the same command goes on."""
        calm, readings = self.undisturbed()
        for word in (signal.SIGTERM, signal.SIGINT):
            with self.subTest(signal=word.name):
                store = self.bench.path(f"{word.name}.db")
                target = self.board(time_scale=SLOW)
                former = self.bench.codes_on_board(target.link)
                running = self.started(target.link, store=store)
                begin = time.monotonic()
                running.send_signal(word)
                out, said = running.communicate(timeout=30)
                self.assertLess(time.monotonic() - begin, 5)
                self.assertEqual(running.returncode, 75, said)
                result = json.loads(out)
                self.assertEqual(result["status"], "stopped")
                self.assertEqual(self.bench.codes_on_board(target.link), former)
                self.assertEqual(self.check(target.link)[0], 0)
                code, again, said = self.bench.tune(target.link, store=store)
                self.assertEqual(code, 0, said)
                self.assertIn("resuming", said)
                self.assertEqual(again["run"], result["run"])
                self.assertEqual(decisions(again), calm)
                self.assertEqual(self.bench.readings(store=store), readings)

    def test_new_instead_of_resume(self):
        """--new begins another run where one could be resumed; another seed does so by itself."""
        target = self.board(time_scale=SLOW)
        running = self.started(target.link)
        running.send_signal(signal.SIGTERM)
        first = json.loads(running.communicate(timeout=30)[0])["run"]
        runs = {first}
        for words in (("--seed", "9"), ("--new",)):
            code, result, said = self.bench.tune(target.link, "--lanes", "0-7", *words)
            self.assertEqual(code, 0, said)
            self.assertNotIn(result["run"], runs)
            runs.add(result["run"])
        listed = json.loads(self.bench.run("runs", "--store", self.store, "--json").stdout)
        self.assertEqual([entry["run"] for entry in listed][0], first)
        self.assertEqual({entry["run"]: entry["status"] for entry in listed}[first], "stopped")

    def test_wall_limit(self):
        """A wall limit ends the run with 75 and the codes restored; what was read is kept."""
        target = self.board(time_scale=0.3)
        former = self.bench.codes_on_board(target.link)
        recipe = self.bench.changed(self.bench.recipe, "recipe.json",
                                    lambda recipe: recipe.update(wall_limit_s=1))
        code, result, said = self.bench.tune(target.link, recipe=recipe)
        self.assertEqual(code, 75, said)
        self.assertEqual(result["status"], "wall_limit")
        self.assertGreater(len(self.bench.readings(all_stages=True)), 5)
        self.assertEqual(self.bench.codes_on_board(target.link), former)

    def test_kill_and_another_store(self):
        """After SIGKILL every verb tells what is pending; another store restores first."""
        target = self.board(time_scale=SLOW)
        write_by_hand(target.tcp)
        former = self.bench.codes_on_board(target.link)
        running = self.started(target.link)
        running.kill()
        running.communicate()
        self.assertNotEqual(self.bench.codes_on_board(target.link), former)
        code, report, said = self.check(target.link)
        self.assertEqual(code, 75, said)
        note = report["restore_pending"]
        self.assertTrue(pathlib.Path(note).exists())
        self.assertNotEqual(self.bench.codes_on_board(target.link), former)
        preview = self.bench.run(*self.bench.tune_words(target.link, "--dry-run", "--json"))
        self.assertEqual(json.loads(preview.stdout)["restore_pending"], note)
        code, result, said = self.bench.tune(target.link, "--lanes", "7",
                                             store=self.bench.path("another.db"))
        self.assertEqual(code, 0, said)
        self.assertIn("left codes to restore", said)
        now = self.bench.codes_on_board(target.link)
        self.assertEqual([now[lane] for lane in range(7)], [BY_HAND] * 7)
        self.assertFalse(pathlib.Path(note).exists())
        self.assertEqual(self.check(target.link)[0], 0)

    def test_a_note_for_another_board(self):
        """Codes of one board that wait to be restored are never written to another one."""
        target = self.board(time_scale=SLOW)
        running = self.started(target.link)
        running.kill()
        running.communicate()
        port = target.port
        target.stop()
        with Target(self.bench, port=port,
                    changes={"faults": {"wrong_identity": {"SERIAL.value": 5}}}) as other:
            tap = self.tap(other)
            before = self.bench.codes_on_board(other.link)
            code, result, said = self.bench.tune(other.link)
            self.assertEqual(code, 78, said)
            self.assertIn("/restore/", said)
            self.assertEqual(self.bench.codes_on_board(other.link), before)
            self.assertEqual(tap.writes, [])


class FullDisk(WithBench):
    def mount(self, size):
        """A small file system of its own; skipped where that is not permitted."""
        folder = self.bench.path("disk")
        folder.mkdir()
        done = subprocess.run(["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(folder)],
                              capture_output=True, text=True)
        if done.returncode != 0:
            self.skipTest("a file system of its own needs root: " + done.stderr.strip())
        self.addCleanup(subprocess.run, ["umount", "-l", str(folder)], check=False)
        return folder

    def test_full_disk(self):
        """A full disk ends with 74, codes restored; with room the same command goes on."""
        calm, readings = self.undisturbed()
        folder = self.mount("512k")
        store = folder / "store.db"
        target = self.board()
        former = self.bench.codes_on_board(target.link)
        code, result, said = self.bench.tune(target.link, store=store)
        self.assertEqual(code, 74, said)
        self.assertIn(str(store), result["error"]["what"])
        self.assertIn("disk is full", result["error"]["what"])
        self.assertEqual(self.bench.codes_on_board(target.link), former)
        self.assertEqual(self.check(target.link)[0], 0)
        kept = self.bench.run("show", "--store", store, "latest", "--json")
        self.assertEqual(kept.returncode, 0, kept.stderr)
        self.assertGreater(sum(lane["reading_count"] for lane in json.loads(kept.stdout)["lanes"]),
                           5)
        subprocess.run(["mount", "-o", "remount,size=64m", str(folder)], check=True)
        code, result, said = self.bench.tune(target.link, store=store)
        self.assertEqual(code, 0, said)
        self.assertIn("resuming", said)
        self.assertEqual(decisions(result), calm)
        self.assertEqual(self.bench.readings(store=store), readings)


if __name__ == "__main__":
    unittest.main(verbosity=2)
