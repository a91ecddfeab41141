"""The same seed on the same board gives the same readings and decisions, whatever the wire, the
number of threads and the order in which answers come.
"""

import pathlib
import sys
import unittest

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
from workbench import Bench, Target, decisions  # noqa: E402


def outcome(link="tcp", threads=1, seed=7, recipe=None, board_seed=20, **changes):
    """Decisions and readings of one run on a board that was just started."""
    with Bench() as bench:
        path = bench.changed(bench.recipe, "recipe.json", recipe) if recipe else bench.recipe
        with Target(bench, tcp=link == "tcp", pty=link == "pty",
                    changes={"seed": board_seed, **changes}) as target:
            code, result, said = bench.tune(target.link, "--threads", threads, "--seed", seed,
                                            recipe=path)
            assert code in (0, 1), said
            assert result["status"] == "complete" and result["seed"] == seed
            on_board = bench.codes_on_board(target.link)
        for lane, (_, codes) in decisions(result).items():
            assert on_board[lane] == codes, f"lane {lane}"
        return {"decisions": decisions(result), "readings": bench.readings(), "result": result,
                "times": times_of(bench)}


def times_of(bench):
    """First and last time of each lane's readings, as text that sorts."""
    done = bench.run("export", "--store", bench.path("store.db"), "latest", "--as", "csv")
    head, *rows = [line.split(",") for line in done.stdout.splitlines()]
    lane, at = head.index("lane"), head.index("time")
    out = {}
    for row in rows:
        first, last = out.get(row[lane], (row[at], row[at]))
        out[row[lane]] = (min(first, row[at]), max(last, row[at]))
    return out


class SameDecisions(unittest.TestCase):
    @classmethod
    def setUpClass(cls):
        cls.first = outcome()

    def assert_same(self, other):
        self.assertEqual(other["decisions"], self.first["decisions"])
        self.assertEqual(len(other["readings"]), len(self.first["readings"]))
        for one, another in zip(self.first["readings"], other["readings"]):
            self.assertEqual(another, one)

    def test_the_run_is_worth_comparing(self):
        """Eight lanes run side by side, move their codes, and read with noise."""
        self.assertEqual(len(self.first["decisions"]), 8)
        self.assertGreater(len({str(codes) for _, codes in self.first["decisions"].values()}), 4)
        starts = [first for first, _ in self.first["times"].values()]
        ends = [last for _, last in self.first["times"].values()]
        self.assertLess(max(starts), min(ends), "the lanes ran one after another")
        measured = {}
        for row in self.first["readings"]:
            key = (row["lane"], *(row[f"{name}_code"] for name in ("r1", "r2", "c1", "c2")))
            measured.setdefault(key, set()).add((row["up_mv"], row["left_ui"], row["right_ui"]))
        self.assertTrue(any(len(values) > 1 for values in measured.values()),
                        "no noise: codes read again gave the same")

    def test_another_board_reads_otherwise(self):
        """A board whose noise has another seed gives other readings: equality means something."""
        self.assertNotEqual(outcome(board_seed=21)["readings"],
                            self.first["readings"])

    def test_repeated_on_a_board_started_anew(self):
        """Repeated on a board started anew, readings and decisions are the same."""
        self.assert_same(outcome())

    def test_two_threads(self):
        """Two worker threads come to what one comes to."""
        self.assert_same(outcome(threads=2))

    def test_serial_port(self):
        """A serial port brings what TCP brings, with one thread and with two."""
        for threads in (1, 2):
            with self.subTest(threads=threads):
                self.assert_same(outcome(link="pty", threads=threads))

    def test_answers_in_another_order(self):
        """Answers that come late and pass one another change nothing."""
        late = {"seed": 3, "late": {"probability": 0.3, "direction": "both", "by_ms": 3}}
        for threads in (1, 2):
            with self.subTest(threads=threads):
                self.assert_same(outcome(threads=threads, faults=late))

    def test_every_strategy(self):
        """Every strategy repeats itself over the other link and with another number of threads."""
        for strategy in ({"name": "descent"}, {"name": "exhaustive", "stride": 6}):
            def changed(recipe, strategy=strategy):
                recipe["strategy"] = strategy
                recipe["budget"] = {"standard_readings": 40}

            with self.subTest(**strategy):
                one = outcome(recipe=changed, threads=1)
                other = outcome(recipe=changed, threads=2, link="pty")
                self.assertEqual(other["decisions"], one["decisions"])
                self.assertEqual(other["readings"], one["readings"])

    def test_another_seed(self):
        """The seed given is the run's; with another one every lane is decided again."""
        other = outcome(seed=8)
        self.assertEqual(set(other["decisions"]), set(self.first["decisions"]))
        self.assertTrue(all(codes for _, codes in other["decisions"].values()))


if __name__ == "__main__":
    unittest.main(verbosity=2)
