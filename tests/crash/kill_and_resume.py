"""SIGKILL at stated points of a run; resumed, it must come to the same decisions from the same
readings, with nothing that was stored measured twice, and restore before anything else.

KILL_COUNT random points are drawn (20 in the plain run), besides one between each pair of: intent
stored, write sent, answer received, reading stored, decision stored, codes settled.
"""

import itertools
import json
import os
import pathlib
import random
import signal
import sys
import unittest

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
from workbench import CRASH_RUNNER, Bench, Target, decisions  # noqa: E402

COUNT = int(os.environ.get("KILL_COUNT", "20"))
SEED = int(os.environ.get("KILL_SEED", "20261201"))


def smaller(recipe):
    recipe["lanes"] = [0, 3, 6]
    recipe["budget"] = {"standard_readings": 24, "bench_s": 6}
    recipe["verify"] = {"rounds": 1}


class KillAndResume(unittest.TestCase):
    numbers = itertools.count(1)

    @classmethod
    def setUpClass(cls):
        cls.bench = Bench()
        cls.recipe = cls.bench.changed(cls.bench.recipe, "recipe.json", smaller)
        with Target(cls.bench) as target:
            cls.former = cls.bench.codes_on_board(target.link)
            done = cls.run_mortally(target, cls.bench.path("calm.db"))
            assert done.returncode == 0, done.stderr
            cls.points = json.loads(done.stdout)
        shown = cls.bench.run("show", "--store", cls.bench.path("calm.db"), "latest", "--json")
        cls.calm = decisions(json.loads(shown.stdout))
        cls.calm_readings = cls.bench.readings(store=cls.bench.path("calm.db"))
        assert len(cls.calm) == 3 and len(cls.calm_readings) > 40

    @classmethod
    def tearDownClass(cls):
        cls.bench.close()

    @classmethod
    def run_mortally(cls, target, store, die=None):
        words = ["--board", cls.bench.board, "--recipe", cls.recipe, "--link", target.link,
                 "--store", store]
        if die:
            words += ["--die", die]
        return cls.bench.run(*words, program=CRASH_RUNNER)

    def kill_then_resume(self, die, second_death=None, may_miss=False):
        """What the resumed run said; None if the run ended before the point, where it may."""
        # Never one with an earlier run, which would spare this one the preflight.
        store = self.bench.path(f"killed-{next(self.numbers)}.db")
        with Target(self.bench) as target:
            done = self.run_mortally(target, store, die)
            if done.returncode == 0 and may_miss and not die.startswith("stored"):
                return None
            self.assertEqual(done.returncode, -signal.SIGKILL, f"{die}: {done.stderr}")
            if may_miss and not die.startswith("stored") and self.status(store) == "complete":
                return None  # killed when all was done: the same words would begin another run
            before = self.bench.readings(store=store) if self.status(store) else []
            if second_death:
                done = self.run_mortally(target, store, second_death)
                self.assertEqual(done.returncode, -signal.SIGKILL, f"{second_death}: {done.stderr}")
            code, result, said = self.bench.tune(target.link, store=store, recipe=self.recipe)
            self.assertIn(code, (0, 1), said)
            self.assertEqual(decisions(result), self.calm, die)
            self.assertEqual(self.bench.readings(store=store), self.calm_readings, die)
            after = self.bench.readings(store=store)
            self.assertEqual([row for row in before if row not in after], [], die)
            on_board = self.bench.codes_on_board(target.link)
            for lane, (_, codes) in self.calm.items():
                self.assertEqual(on_board[lane], codes, f"{die}, lane {lane}")
            for lane in set(on_board) - set(self.calm):
                self.assertEqual(on_board[lane], self.former[lane], die)
        return said

    def status(self, store):
        """Of the store's latest run; None where it has none."""
        done = self.bench.run("show", "--store", store, "latest", "--json")
        return json.loads(done.stdout)["status"] if done.returncode == 0 else None

    def test_between_each_pair_of_steps(self):
        middle = self.points["stored.intent"] // 2
        for die in [f"stored.intent:{middle}",          # intent stored, nothing sent
                    f"sending:{middle}",                # just before bytes go out
                    f"sent:{middle}",                   # write sent, no answer seen
                    f"received:{middle}",               # read back, reading not stored
                    f"stored.reading:{middle}",         # reading stored, strategy not told
                    "stored.lane_decided:1", "stored.lane_decided:3",  # before the comparison
                    "stored.lane_settled:1", "stored.lane_finished:2",
                    "stored.lane_saved:2", "stored.identified:1"]:
            with self.subTest(die=die):
                self.kill_then_resume(die)

    def test_killed_again_while_restoring(self):
        # The restore of the second start is its first write behind greeting and identity.
        for second in ["sent:3", "received:3", "stored.codes_written:1"]:
            with self.subTest(second=second):
                self.kill_then_resume(f"stored.intent:{self.points['stored.intent'] // 2}", second)

    def test_at_random_points(self):
        draw = random.Random(SEED)
        kinds = [("stored", self.points["stored"]), ("sent", self.points["sent"]),
                 ("received", self.points["received"])]
        weights = [count for _, count in kinds]
        for _ in range(COUNT):
            kind, count = draw.choices(kinds, weights)[0]
            number = draw.randint(1, int(count * 0.98))
            with self.subTest(die=f"{kind}:{number}", seed=SEED):
                # On a busy machine more bytes go out, and come in, at once: fewer such points.
                while self.kill_then_resume(f"{kind}:{number}", may_miss=True) is None:
                    number = max(1, number * 2 // 3)

    def test_restore_comes_first_even_with_another_store(self):
        with Target(self.bench) as target:
            store = self.bench.path("first.db")
            middle = self.points["stored.reading"] // 2
            done = self.run_mortally(target, store, f"stored.reading:{middle}")
            self.assertEqual(done.returncode, -signal.SIGKILL)
            moved = self.bench.codes_on_board(target.link)
            self.assertNotEqual(moved, self.former, "the kill came before any code had moved")
            other = self.bench.path("other.db")
            code, result, said = self.bench.tune(target.link, store=other, recipe=self.recipe)
            self.assertIn(code, (0, 1), said)
            self.assertIn("left codes to restore", said)
            for lane in result["lanes"]:
                self.assertEqual(lane["former_codes"], self.former[lane["lane"]])


if __name__ == "__main__":
    unittest.main(verbosity=2)
