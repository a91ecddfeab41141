"""Is the bench fit to measure on? Every item of the preflight is made to fail by a switch of the
simulated board, and must be seen by its name; what passes is kept, used and not measured again.
"""

import json
import pathlib
import sys
import unittest

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
from workbench import SOURCE, Bench, Target, too_wide  # noqa: E402

MEASURED = ("repeatability", "return_error", "settle_time")
QUICK = ("reference_clock", "lock", "pattern_sync", "polarity", "lane_order", "loops", "monitor")
COUNTED = SOURCE / "configs/boards/demo_counted.json"
EXIT_NOT_FIT = 76


def quick_recipe(recipe):
    recipe["budget"] = {"standard_readings": 30, "bench_s": 10}
    recipe["verify"] = {"rounds": 1}


class WithBench(unittest.TestCase):
    def setUp(self):
        self.bench = Bench()
        self.addCleanup(self.bench.close)
        self.recipe = self.bench.changed(self.bench.recipe, "recipe.json", quick_recipe)

    def target(self, **changes):
        target = Target(self.bench, changes=changes)
        self.addCleanup(target.stop)
        return target

    def measure(self, link, *more, board=None):
        done = self.bench.run("check", "--measure", "--board", board or self.bench.board, "--link",
                              link, "--store", self.bench.path("store.db"), "--json", *more)
        try:
            return done.returncode, json.loads(done.stdout), done.stderr
        except json.JSONDecodeError as error:
            raise AssertionError(f"{done.stdout!r}\n{done.stderr}") from error

    def items(self, result):
        return {(item["name"], item["lane"]): item for item in result["items"]}

    def failed(self, result):
        return {item["name"] for item in result["items"] if item["result"] == "failed"}


class Healthy(WithBench):
    def test_all_of_it(self):
        """A healthy board passes; codes are put back; the measured values stand in the JSON."""
        for board in (self.bench.board, COUNTED):
            with self.subTest(board=board.name):
                target = self.target()
                before = self.bench.codes_on_board(target.link)
                code, result, said = self.measure(target.link, "--lanes", "0-3", board=board)
                self.assertEqual(code, 0, json.dumps(result.get("items"), indent=1) + said)
                self.assertEqual(result["format"], "lanewright-preflight/1")
                self.assertTrue(result["passed"])
                self.assertTrue(result["simulated"])
                names = {item["name"] for item in result["items"]}
                self.assertLessEqual({*QUICK, *MEASURED, "parallel"}, names)
                values = next(item["values"] for item in result["items"]
                              if item["name"] == "repeatability")
                self.assertGreater(values["height_sigma_mv"], 0.2)
                self.assertLess(values["height_sigma_mv"], 5)
                self.assertEqual(values["reading_count"] + values["left_out"], 20)
                self.assertEqual(self.bench.codes_on_board(target.link), before)

    def test_table(self):
        """The table for people keeps to 80 columns and ends with the verdict."""
        target = self.target()
        done = self.bench.run("check", "--measure", "--board", self.bench.board, "--link",
                              target.link, "--store", self.bench.path("store.db"), "--lanes",
                              "0,2", "--tag", "chip=A7", "--condition", "85C")
        self.assertEqual(done.returncode, 0, done.stdout + done.stderr)
        self.assertEqual(too_wide(done.stdout), [])
        self.assertTrue(done.stdout.endswith("good\n"))
        for word in (*QUICK, *MEASURED, "SIMULATED", "sigma of one edge", "condition 85C"):
            self.assertIn(word, done.stdout)
        shown = self.bench.run("show", "--store", self.bench.path("store.db"), "latest").stdout
        self.assertIn("repeatability", shown)
        listed = self.bench.run("runs", "--store", self.bench.path("store.db")).stdout
        self.assertRegex(listed, r"preflight +fit \(sim")
        self.assertEqual(too_wide(listed), [])

    def test_used_by_a_tune(self):
        """A tune takes what was measured from the store, says so, and measures it no second time."""
        target = self.target()
        code, measured, said = self.measure(target.link, "--lanes", "0,2", "--recipe", self.recipe)
        self.assertEqual(code, 0, said)
        code, result, said = self.bench.tune(target.link, "--lanes", "0,2", recipe=self.recipe)
        self.assertIn(code, (0, 1), said)
        repeats = self.items(result["preflight"])[("repeatability", None)]
        self.assertEqual(repeats["from"], measured["run"])
        for lane in result["lanes"]:
            self.assertEqual(lane["noise"]["basis"], "measured")
            self.assertEqual(lane["noise"]["from"], measured["run"])
            self.assertLess(lane["side_reading_count"], 10)
        text = self.bench.run("show", "--store", self.bench.path("store.db"), "latest").stdout
        self.assertIn("in place of the declared one", text)
        self.assertEqual(too_wide(text), [])

    def test_measured_by_a_tune(self):
        """Without a check before it, a tune measures by itself, and once for that condition."""
        target = self.target()
        _, first, said = self.bench.tune(target.link, "--lanes", "0,2", recipe=self.recipe)
        self.assertIn("preflight: repeatability passed", said)
        _, second, _ = self.bench.tune(target.link, "--lanes", "0,2", "--seed", "2",
                                       recipe=self.recipe)
        self.assertEqual(second["lanes"][0]["noise"]["from"], first["run"])
        _, hot, _ = self.bench.tune(target.link, "--lanes", "0,2", "--condition", "hot",
                                    recipe=self.recipe)
        self.assertIsNone(hot["lanes"][0]["noise"]["from"])
        self.assertEqual(hot["lanes"][0]["noise"]["basis"], "measured")

    def test_words_that_need_measure(self):
        """Options of --measure without it are refused, not ignored."""
        done = self.bench.run("check", "--board", self.bench.board, "--lanes", "0")
        self.assertEqual(done.returncode, 64)
        self.assertIn("--measure", done.stderr)


class Failing(WithBench):
    # Switch of the target, its value, the item that must be named, the board file.
    CASES = [("reference_clock", "absent", "reference_clock", None),
             ("reference_clock", "off", "reference_clock", None),
             ("no_lock", [2], "lock", None),
             ("pattern_out_of_sync", [2], "pattern_sync", None),
             ("inverted", [2], "polarity", None),
             ("swapped", [[0, 2]], "lane_order", None),
             ("loops_off", [2], "loops", None),
             ("too_few_errors", [0], "monitor", COUNTED),
             ("wrong_bits", [0], "monitor", COUNTED),
             ("not_monotone", [0], "monitor", COUNTED),
             ("repeatability_times", 12, "repeatability", None),
             ("return_error_times", 40, "return_error", None),
             ("settle_times", 400, "settle_time", None)]

    def test_each_switch_is_seen_by_name(self):
        """Each switch makes its item fail, and `check --measure` names it and says what to do."""
        for switch, value, name, board in self.CASES:
            with self.subTest(switch=switch):
                with Target(self.bench, changes={"failures": {switch: value}}) as target:
                    code, result, said = self.measure(target.link, "--lanes", "0,2", board=board)
                    self.assertEqual(code, EXIT_NOT_FIT, json.dumps(result, indent=1) + said)
                    self.assertIn(name, self.failed(result))
                    self.assertFalse(result["passed"])
                    for item in result["items"]:
                        if item["name"] == name and item["result"] == "failed":
                            self.assertTrue(item["advice"])
                            self.assertTrue(item["found"])

    def test_a_failed_item_stops_a_tune(self):
        """A tune stops with its own exit code before it searches; the codes are as they were."""
        for switch, value, name in (("inverted", [2], "polarity"),
                                    ("repeatability_times", 12, "repeatability")):
            with self.subTest(switch=switch):
                with Target(self.bench, changes={"failures": {switch: value}}) as target:
                    before = self.bench.codes_on_board(target.link)
                    code, result, said = self.bench.tune(target.link, "--lanes", "0,2", "--new",
                                                         recipe=self.recipe)
                    self.assertEqual(code, EXIT_NOT_FIT, said)
                    self.assertEqual(result["error"]["cause"], "not fit to measure")
                    self.assertIn(name, result["error"]["what"])
                    self.assertIn("expected", result["error"]["what"])
                    self.assertEqual(self.bench.codes_on_board(target.link), before)
                    rows = self.bench.readings(all_stages=True)
                    self.assertNotIn("search", {row["stage"] for row in rows})

    def test_lanes_that_disturb_each_other(self):
        """Two lanes that read otherwise at the same time make the run go one lane at a time."""
        target = self.target(failures={"parallel_offset_mv": 25}, time_scale=0.3)
        code, result, said = self.bench.tune(target.link, "--lanes", "0,2", recipe=self.recipe)
        self.assertIn(code, (0, 1), said)
        self.assertIn("one lane at a time", said)
        self.assertTrue(result["preflight"]["one_at_a_time"])
        parallel = self.items(result["preflight"])[("parallel", None)]
        self.assertEqual(parallel["result"], "noted")
        self.assertIn("lanes 0 and 2", parallel["found"])


if __name__ == "__main__":
    unittest.main(verbosity=2)
