"""A board is never left in codes nobody asked for, whichever link, store or shell was used, and no
result claims what was not measured."""

import json
import os
import pathlib
import signal
import subprocess
import sys
import time
import unittest

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
from workbench import LANEWRIGHT, Bench, Target, wait_until  # noqa: E402


def slow_recipe(recipe):
    recipe["budget"] = {"standard_readings": 40, "bench_s": 10}
    recipe["verify"] = {"rounds": 1}


class BoardSafety(unittest.TestCase):
    def setUp(self):
        self.bench = Bench()
        self.addCleanup(self.bench.close)
        self.recipe = self.bench.changed(self.bench.recipe, "recipe.json", slow_recipe)

    def target(self, **options):
        target = Target(self.bench, **options)
        self.addCleanup(target.stop)
        return target

    def start_and_wait_until_moved(self, link, *more, store=None):
        """A tune on lane 7 that is certainly in the middle of its search."""
        process = self.bench.start(*self.bench.tune_words(
            link, "--lanes", "7", *more, recipe=self.recipe, store=store))
        self.addCleanup(lambda: (process.poll() is None and process.kill(), process.wait(),
                                 process.stdout.close(), process.stderr.close()))
        notes = self.bench.folder / "state" / "lanewright" / "restore"
        self.assertTrue(wait_until(lambda: notes.is_dir() and any(notes.glob("*.json"))))
        time.sleep(1.0)
        self.assertIsNone(process.poll())
        return process

    def test_killed_over_tcp_restored_over_serial(self):
        """Codes left by a run over one link are restored first over another."""
        target = self.target(pty=True, changes={"time_scale": 1})
        serial = f"serial:{target.pty}"
        former = self.bench.codes_on_board(target.link)
        process = self.start_and_wait_until_moved(target.link)
        process.kill()
        process.wait()
        self.assertNotEqual(self.bench.codes_on_board(serial)[7], former[7])
        code, result, said = self.bench.tune(serial, "--lanes", "7", recipe=self.recipe,
                                             store=self.bench.path("other.db"))
        self.assertIn(code, (0, 1), said)
        self.assertIn("left codes to restore", said)
        self.assertEqual(result["lanes"][0]["former_codes"], former[7])
        notes = list((self.bench.folder / "state/lanewright/restore").glob("*.json"))
        self.assertEqual(notes, [])

    def test_two_processes_over_two_links(self):
        """A second process on the same board over another link is refused and told who has it."""
        target = self.target(pty=True, changes={"time_scale": 1})
        process = self.start_and_wait_until_moved(target.link)
        code, result, _ = self.bench.tune(f"serial:{target.pty}", "--lanes", "0",
                                          recipe=self.recipe, store=self.bench.path("other.db"))
        self.assertEqual(code, 75)
        self.assertIn(str(process.pid), result["error"]["what"])
        process.send_signal(signal.SIGHUP)
        self.assertEqual(process.wait(timeout=20), 75)

    def test_a_hang_up_restores(self):
        """SIGHUP (a closed terminal) ends a run as Ctrl-C does: codes put back."""
        target = self.target(changes={"time_scale": 1})
        former = self.bench.codes_on_board(target.link)
        process = self.start_and_wait_until_moved(target.link)
        process.send_signal(signal.SIGHUP)
        self.assertEqual(process.wait(timeout=20), 75)
        self.assertEqual(self.bench.codes_on_board(target.link), former)

    def narrow_board(self):
        """The demo board with limits that the chip's present codes (r1 = 28) do not keep."""
        def change(board):
            for register in board["registers"]:
                if register["name"] == "EQ_R1":
                    register["fields"][0].update(highest=20, reset=16)
            for dimension in board["dimensions"]:
                if dimension["name"] == "r1":
                    dimension["nominal_ohm"] = dimension["nominal_ohm"][:21]
            board["forbidden"] = []
        return self.bench.changed(self.bench.board, "narrow.json", change)

    def test_present_codes_that_could_not_be_restored(self):
        """Nothing is written to a lane whose present codes may not be written back."""
        target = self.target()
        former = self.bench.codes_on_board(target.link)
        code, result, said = self.bench.tune(target.link, "--lanes", "7", recipe=self.recipe,
                                             board=self.narrow_board())
        self.assertEqual(code, 1, said)
        self.assertEqual(result["lanes"][0]["outcome"], "failed")
        self.assertIn("could not be restored", result["lanes"][0]["reason"])
        self.assertEqual(self.bench.codes_on_board(target.link), former)

    def test_a_refused_apply_is_not_carried_out_later(self):
        """What apply refuses is not left behind for the next contact."""
        target = self.target()
        code, _, said = self.bench.tune(target.link, "--lanes", "7", recipe=self.recipe)
        self.assertIn(code, (0, 1), said)
        tuned = self.bench.codes_on_board(target.link)
        refused = self.bench.run("apply", "--board", self.narrow_board(), "--link", target.link,
                                 "--store", self.bench.path("store.db"), "latest", "--former")
        self.assertEqual(refused.returncode, 78, refused.stderr)
        _, _, said = self.bench.tune(target.link, "--lanes", "0", recipe=self.recipe)
        self.assertNotIn("left codes", said)
        self.assertEqual(self.bench.codes_on_board(target.link)[7], tuned[7])

    def test_another_condition_is_another_run(self):
        """Readings of one corner are never stored under another's name."""
        target = self.target(changes={"time_scale": 1})
        process = self.start_and_wait_until_moved(target.link, "--condition", "hot")
        process.send_signal(signal.SIGINT)
        self.assertEqual(process.wait(timeout=20), 75)
        _, result, said = self.bench.tune(target.link, "--lanes", "7", "--condition", "cold",
                                          recipe=self.recipe)
        self.assertNotIn("resuming", said)
        self.assertEqual(result["condition"], "cold")

    def test_an_older_run_does_not_undo_a_newer_one(self):
        """A stopped run is not resumed over a later run of the same lanes."""
        target = self.target(changes={"time_scale": 1})
        process = self.start_and_wait_until_moved(target.link)
        process.send_signal(signal.SIGINT)
        self.assertEqual(process.wait(timeout=20), 75)
        _, later, _ = self.bench.tune(target.link, "--lanes", "7", "--seed", "2",
                                      recipe=self.recipe)
        _, again, said = self.bench.tune(target.link, "--lanes", "7", recipe=self.recipe)
        self.assertNotIn("resuming", said)
        self.assertEqual(again["lanes"][0]["former_codes"], later["lanes"][0]["codes"])

    def test_proof_is_taken_at_the_required_error_ratio(self):
        """Before and after are read at the required ratio, not at the search's."""
        def stricter(recipe):
            slow_recipe(recipe)
            recipe["required"].update(error_ratio=1e-8, height_mv=20, width_ui=0.3)
        recipe = self.bench.changed(self.bench.recipe, "strict.json", stricter)
        target = self.target()
        _, result, said = self.bench.tune(target.link, "--lanes", "0", recipe=recipe)
        self.assertEqual(result["lanes"][0]["after"]["error_ratio"], 1e-8, said)
        self.assertIn(result["lanes"][0]["verdict"], ("meets", "fails"))

    def test_a_closed_eye_has_no_margin(self):
        """Distances and score of a closed latched eye are null: nothing of it was measured."""
        # On lane 7 these have lock and a closed eye; the demo's own have no lock there.
        present = {"r1": 16, "r2": 6, "c1": 8, "c2": 1}
        target = self.target(changes={"reset_codes": present})
        _, result, _ = self.bench.tune(target.link, "--lanes", "7", recipe=self.recipe)
        self.assertEqual(result["lanes"][0]["former_codes"], present)
        before = result["lanes"][0]["before"]
        self.assertEqual(before["status"], "closed")
        for key in ("up_mv", "down_mv", "left_ui", "right_ui", "height_mv", "width_ui", "score"):
            self.assertIsNone(before[key], key)
        self.assertLess(before["score_high"], 0.5)
        shown = self.bench.run("show", "--store", self.bench.path("store.db"), "latest").stdout
        self.assertIn("closed", shown)

    def test_closed_and_full_output(self):
        """A closed stdout reaches no lock file, and output that cannot be written is an error."""
        target = self.target()
        words = self.bench.tune_words(target.link, "--lanes", "0", recipe=self.recipe)
        command = " ".join(f"'{word}'" for word in [LANEWRIGHT, *words])
        done = subprocess.run(["sh", "-c", f"{command} <&- >&- 2>/dev/null"],
                              env=self.bench.environment, timeout=60, check=False)
        self.assertIn(done.returncode, (0, 1))
        for lock in (self.bench.folder / "locks").glob("*.lock"):
            self.assertTrue(lock.read_text().startswith("pid="), lock.read_text()[:80])
        with open("/dev/full", "w", encoding="utf-8") as full:
            for verb in (["show", "latest"], ["export", "latest", "--as", "csv"]):
                done = subprocess.run(
                    [str(LANEWRIGHT), verb[0], "--store", str(self.bench.path("store.db")),
                     *verb[1:]], stdout=full, stderr=subprocess.PIPE, env=self.bench.environment,
                    timeout=60, check=False)
                self.assertEqual(done.returncode, 74, verb)

    def test_words_that_are_easily_wrong(self):
        """An empty --lanes and a seed beyond 64 bits are refused, the largest seed is taken."""
        target = self.target()
        for more in (["--lanes", ""], ["--seed", "18446744073709551616"], ["--seed", "-1"],
                     ["--seed", "1x"]):
            code, result, _ = self.bench.tune(target.link, *more, recipe=self.recipe)
            self.assertEqual(code, 64, more)
            self.assertIn(more[0][2:], json.dumps(result))
        _, result, _ = self.bench.tune(target.link, "--lanes", "0", "--seed",
                                       "18446744073709551615", recipe=self.recipe)
        self.assertEqual(result["seed"], 18446744073709551615)


if __name__ == "__main__":
    os.environ.setdefault("NO_COLOR", "1")
    unittest.main(verbosity=2)
