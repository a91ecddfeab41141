"""Every verb and option of the command line against a simulated board: what goes to stdout and to
stderr, exit codes, and the shapes that other programs read.
"""

import csv
import datetime
import io
import json
import pathlib
import re
import sys
import unittest

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
from framed_host import Host  # noqa: E402
from wire_tap import Tap  # noqa: E402
from workbench import ESCAPE, SOURCE, TARGET, Bench, Target, decisions, too_wide  # noqa: E402

NUMBER = (int, float)
WHOLE = int
MAYBE = type(None)
RUN_KEYS = {"format": str, "run": str, "board": str, "simulated": bool, "identity": dict,
            "recipe": str, "seed": WHOLE, "tags": dict, "condition": (str, MAYBE),
            "bench_s": NUMBER, "wall_s": NUMBER, "link": dict, "lanes": list}
LINK_KEYS = ("frames", "bad_frames", "retries", "reconnects", "resets")
LANE_KEYS = {"lane": WHOLE, "verdict": (str, MAYBE), "outcome": str, "former_codes": dict,
             "codes": dict, "before": dict, "after": dict, "response": dict,
             "reading_count": WHOLE, "bit_count": WHOLE, "bench_s": NUMBER, "reason": str}
EDGES = [f"{side}_{se}{unit}" for unit, sides in (("mv", ("up", "down")), ("ui", ("left", "right")))
         for side in sides for se in ("", "se_")]
MARGIN_KEYS = {**{edge: (*NUMBER, MAYBE) for edge in EDGES}, "status": str,
               "height_mv": (*NUMBER, MAYBE), "width_ui": (*NUMBER, MAYBE),
               "score": (*NUMBER, MAYBE), "score_low": (*NUMBER, MAYBE),
               "score_high": (*NUMBER, MAYBE), "basis": str, "error_ratio": NUMBER,
               "error_definition": str}
RESPONSE_KEYS = ("dc_db", "hf_db", "peaking_db", "zero_ghz", "pole_ghz", "level_ohm")


def strict(text):
    """The one JSON value that the text is; NaN and infinities are refused (RFC 8259)."""
    def refuse(word):
        raise ValueError(f"{word} is no JSON")
    return json.loads(text, parse_constant=refuse)


class WithRun(unittest.TestCase):
    """A bench on which one run has been tuned; tests here only look."""

    @classmethod
    def setUpClass(cls):
        cls.bench = Bench()
        cls.store = cls.bench.path("store.db")
        cls.target = Target(cls.bench, pty=True)
        cls.former = cls.bench.codes_on_board(cls.target.link)
        cls.done = cls.bench.run(*cls.bench.tune_words(
            cls.target.link, "--json", "--tag", "chip=A7", "--tag", "site=b=2", "--condition",
            "85C, low", "--seed", "5"))
        assert cls.done.returncode == 0, cls.done.stderr
        cls.result = strict(cls.done.stdout)
        cls.run_id = cls.result["run"]

    @classmethod
    def tearDownClass(cls):
        cls.target.stop()
        cls.bench.close()

    def of_store(self, verb, *words):
        return self.bench.run(verb, "--store", self.store, *words)

    def check_type(self, value, wanted, name):
        if wanted is not bool and bool not in (wanted if isinstance(wanted, tuple) else (wanted,)):
            self.assertNotIsInstance(value, bool, name)
        self.assertIsInstance(value, wanted, name)


class Results(WithRun):
    def test_keys_and_types_of_the_result(self):
        """The result has every key with its type, and says what was asked for."""
        for key, kind in RUN_KEYS.items():
            self.assertIn(key, self.result)
            self.check_type(self.result[key], kind, key)
        self.assertEqual(self.result["format"], "lanewright-run/1")
        self.assertIs(self.result["simulated"], True)
        self.assertEqual(self.result["seed"], 5)
        self.assertEqual(self.result["tags"], {"chip": "A7", "site": "b=2"})
        self.assertEqual(self.result["condition"], "85C, low")
        self.assertEqual(self.result["board"], "tarn-1")
        self.assertEqual(self.result["recipe"], "demo")
        self.assertEqual(self.result["identity"]["serial"], 104729)
        for key in LINK_KEYS:
            self.check_type(self.result["link"][key], WHOLE, key)
        self.assertGreater(self.result["link"]["frames"], 100)
        self.assertEqual([lane["lane"] for lane in self.result["lanes"]], list(range(8)))

    def test_keys_and_types_of_each_lane(self):
        """Each lane has every key with its type, from codes to reason."""
        for lane in self.result["lanes"]:
            for key, kind in LANE_KEYS.items():
                self.assertIn(key, lane)
                self.check_type(lane[key], kind, key)
            self.assertIn(lane["verdict"], ("meets", "fails", "undecided"))
            self.assertIn(lane["outcome"], ("tuned", "unchanged"))
            self.assertEqual(list(lane["codes"]), ["r1", "r2", "c1", "c2"])
            self.assertEqual(lane["former_codes"], self.former[lane["lane"]])
            for moment in ("before", "after"):
                for key, kind in MARGIN_KEYS.items():
                    self.assertIn(key, lane[moment])
                    self.check_type(lane[moment][key], kind, key)
                self.assertIn(lane[moment]["basis"], ("counted", "extrapolated"))
                self.assertEqual(lane[moment]["error_definition"], "pattern")
            for key in RESPONSE_KEYS:
                self.check_type(lane["response"][key], NUMBER, key)

    def test_numbers_of_a_lane_fit_together(self):
        """Height is up + down, peaking is hf - dc, gains are not above 0 dB, limits enclose."""
        for lane in self.result["lanes"]:
            after, response = lane["after"], lane["response"]
            self.assertAlmostEqual(after["height_mv"], after["up_mv"] + after["down_mv"], 9)
            self.assertAlmostEqual(after["width_ui"], after["left_ui"] + after["right_ui"], 9)
            smaller = min(2 * min(after["up_mv"], after["down_mv"]) / 30,
                          2 * min(after["left_ui"], after["right_ui"]) / 0.4)
            self.assertAlmostEqual(after["score"], smaller, 9)
            self.assertLessEqual(after["score_low"], after["score"])
            self.assertGreaterEqual(after["score_high"], after["score"])
            # A passive network never amplifies: common practice.
            self.assertLessEqual(response["dc_db"], 0)
            self.assertLessEqual(response["hf_db"], 0)
            self.assertAlmostEqual(response["peaking_db"], response["hf_db"] - response["dc_db"], 9)
        self.assertAlmostEqual(self.result["bench_s"],
                               sum(lane["bench_s"] for lane in self.result["lanes"]), 6)

    def test_show_and_export_give_the_same_object(self):
        """show --json, export --as json and tune --json are the same object."""
        for words in (("show", self.run_id, "--json"), ("show", "latest", "--json"),
                      ("show", self.run_id[:17], "--json"),
                      ("export", self.run_id, "--as", "json")):
            done = self.of_store(*words)
            self.assertEqual(done.returncode, 0, done.stderr)
            self.assertEqual(strict(done.stdout), self.result, words)

    def test_runs_is_an_array(self):
        """runs --json is an array with one entry for each run."""
        done = self.of_store("runs", "--json")
        self.assertEqual(done.returncode, 0, done.stderr)
        runs = strict(done.stdout)
        self.assertIsInstance(runs, list)
        self.assertEqual([entry["run"] for entry in runs], [self.run_id])
        self.assertEqual(runs[0]["meets_count"], 8)
        self.assertIs(runs[0]["simulated"], True)
        self.assertIn(self.run_id, self.of_store("runs").stdout)

    def test_progress_goes_to_stderr(self):
        """With --json stdout is the object alone; progress goes to stderr in plain lines."""
        self.assertTrue(self.done.stdout.startswith("{"))
        self.assertIn("lane 7: tuned", self.done.stderr)
        self.assertNotIn("\x1b", self.done.stderr + self.done.stdout)

    def test_csv(self):
        """The CSV is a row a reading, units in the header, ISO 8601 times with offset."""
        done = self.of_store("export", self.run_id, "--as", "csv")
        self.assertEqual(done.returncode, 0, done.stderr)
        rows = list(csv.DictReader(io.StringIO(done.stdout)))
        self.assertEqual(len(rows), sum(lane["reading_count"] for lane in self.result["lanes"]))
        for key in ("up_mv", "up_se_mv", "down_mv", "left_ui", "right_se_ui", "cost_s", "bit_count",
                    "error_ratio", "r1_code", "lane", "run", "time"):
            self.assertIn(key, rows[0])
        for row in rows:
            self.assertIsNone(row.get(None), "more fields than the header names")
            self.assertNotIn(None, row.values())
            self.assertIsNotNone(datetime.datetime.fromisoformat(row["time"]).tzinfo)
            self.assertEqual(row["condition"], "85C, low")
            self.assertEqual(row["run"], self.run_id)
        bench_s = sum(float(row["cost_s"]) for row in rows)
        self.assertAlmostEqual(bench_s, self.result["bench_s"], 6)

    def test_out_file(self):
        """export --out writes the file and nothing to stdout."""
        path = self.bench.path("out.csv")
        done = self.of_store("export", self.run_id, "--as", "csv", "--out", path)
        self.assertEqual((done.returncode, done.stdout), (0, ""))
        self.assertEqual(path.read_text(),
                         self.of_store("export", self.run_id, "--as", "csv").stdout)

    def test_writes(self):
        """writes is one line a write, in the order that the board file declares."""
        lines = written_lines(self.of_store("export", self.run_id, "--as", "writes").stdout)
        order = ["RX_CTL", "EQ_R1", "EQ_R2", "EQ_C1", "EQ_C2", "EQ_LOAD", "RX_CTL"]
        self.assertEqual([(lane, name) for lane, name, *_ in lines],
                         [(lane, name) for lane in range(8) for name in order])
        for lane, name, address, mask, value, comment in lines:
            self.assertEqual(address // 0x40, 4 + lane)  # base 0x100, stride 0x40
            self.assertEqual(value & ~mask, 0)
            self.assertTrue(comment)
            code = self.result["lanes"][lane]["codes"].get(name[3:].lower())
            if code is not None:
                self.assertEqual(value, code)


def written_lines(text):
    """lane, register, address, mask, value, comment of each write of an export."""
    out = []
    for line in text.splitlines():
        if line.startswith("#"):
            continue
        words, _, comment = line.partition("#")
        lane, name, address, mask, value = words.split()
        assert all(word.startswith("0x") for word in (address, mask, value)), line
        out.append((int(lane), name, int(address, 16), int(mask, 16), int(value, 16),
                    comment.strip()))
    return out


class AgainstTruth(unittest.TestCase):
    def board_that_tells_the_truth(self):
        """Changes to the demo target: a noisy, rounding monitor, but with true steps from the
        decision point and no drift; a receiver that lands where it did and keeps what is written.
        """
        target = strict((SOURCE / "configs/targets/demo.json").read_text())
        target["monitor"].update(offset_sigma_mv=0, phase_sigma_ui=0, gain_tolerance=0,
                                 nonlinearity_steps=0, height_drift_mv=0, width_drift_ui=0,
                                 deterministic_jitter_ui=0, event_share=0)
        target["lock"].update(landing_sigma_ui=0, wander_sigma_ui=0)
        target["write_effects"].update(return_offset_mv=0, return_gain=0)
        return {part: target[part] for part in ("monitor", "lock", "write_effects")}

    def test_after_agrees_with_the_noise_free_truth(self):
        """What was measured after the decision is the true margin, within noise and rounding."""
        with Bench() as bench, Target(bench, changes=self.board_that_tells_the_truth()) as target:
            _, result, said = bench.tune(target.link, "--seed", "5")
            self.assertEqual(len(result["lanes"]), 8, said)
            for lane in result["lanes"]:
                codes = ",".join(f"{name}={code}" for name, code in lane["codes"].items())
                done = bench.run("truth", "--target", bench.path("target.json"), "--lane",
                                 lane["lane"], "--codes", codes, "--json", program=TARGET)
                self.assertEqual(done.returncode, 0, done.stderr)
                true = strict(done.stdout)["results"][0]
                for edge, slack in (("up_mv", 1), ("down_mv", 1), ("left_ui", 1 / 128),
                                    ("right_ui", 1 / 128)):
                    se = lane["after"][edge.replace("_", "_se_")]
                    # Half a step of rounding, and 4.5 standard errors: one in 4,000 runs of 32
                    # edges.
                    self.assertLess(abs(lane["after"][edge] - true[edge]), slack + 4.5 * se, edge)


class OnTerminal(WithRun):
    """A terminal of 80 columns."""

    def assert_narrow(self, text):
        self.assertEqual(too_wide(text), [])

    def test_text_of_every_verb_fits(self):
        """runs, show, check and dry runs print nothing wider than 80 columns."""
        at_board = ("--board", self.bench.board, "--link", self.target.link)
        for words in (("runs", "--store", self.store), ("show", "--store", self.store, "latest"),
                      ("check", *at_board),
                      ("tune", *at_board, "--recipe", self.bench.recipe, "--dry-run"),
                      ("--help",), ("tune", "--help"), ("check", "--help"), ("export", "--help")):
            with self.subTest(words=words[0]):
                code, text = self.bench.on_terminal(*words)
                self.assertEqual(code, 0, text)
                self.assertGreater(len(text), 40)
                self.assert_narrow(text)
                self.assert_narrow(self.bench.run(*words).stdout)

    def test_progress_and_table(self):
        """A line a lane while it runs, then one table; at most 80 columns."""
        words = self.bench.tune_words(self.target.link, "--new", store=self.bench.path("other.db"))
        code, text = self.bench.on_terminal(*words)
        self.assertEqual(code, 0, text)
        self.assert_narrow(text)
        plain = ESCAPE.sub("", text)
        self.assertRegex(plain, r"lane  7 .* best .* readings .* s")
        self.assertEqual(len(re.findall(r"^\s*[0-7]  meets", plain, re.M)), 8)
        self.assertIn("\x1b[32m", text)

    def test_no_color(self):
        """NO_COLOR (no-color.org) and a dumb terminal get no colours; a pipe never does."""
        for environment in ({"NO_COLOR": "1"}, {"TERM": "dumb"}):
            code, text = self.bench.on_terminal("show", "--store", self.store, "latest",
                                                environment=environment)
            self.assertEqual(code, 0)
            self.assertNotIn("\x1b[", text)
        code, text = self.bench.on_terminal("show", "--store", self.store, "latest",
                                            environment={"NO_COLOR": ""})
        self.assertIn("\x1b[", text)
        self.assertNotIn("\x1b", self.of_store("show", "latest").stdout)

    def test_simulated_boards_say_so(self):
        """What comes from a simulated board says so in every text."""
        for done in (self.of_store("show", "latest"), self.of_store("runs"),
                     self.of_store("export", "latest", "--as", "writes"),
                     self.bench.run("check", "--board", self.bench.board, "--link",
                                    self.target.link)):
            self.assertRegex(done.stdout, r"SIMULATED|sim\.")


class AtTheBoard(unittest.TestCase):
    """Verbs that talk to a board, each test with one of its own."""

    def setUp(self):
        self.bench = Bench()
        self.addCleanup(self.bench.close)
        self.target = Target(self.bench)
        self.addCleanup(self.target.stop)
        self.tap = Tap(self.target.tcp)
        self.addCleanup(self.tap.close)
        self.store = self.bench.path("store.db")

    def tuned(self, *words):
        code, result, said = self.bench.tune(self.target.link, *words)
        self.assertEqual(code, 0, said)
        return result

    def test_check_moves_no_code(self):
        """check writes the scratch register only, and tells identity, counts and round trips."""
        done = self.bench.run("check", "--board", self.bench.board, "--link", self.tap.link,
                              "--json")
        self.assertEqual(done.returncode, 0, done.stderr)
        report = strict(done.stdout)
        self.assertIs(report["good"], True)
        self.assertEqual(report["identity"]["chip"], 0x4F5A5238)
        self.assertEqual({address for address, _, _ in self.tap.writes}, {4})  # SCRATCH
        self.assertEqual(report["link_counts"]["bad_frames"], 0)
        bins = report["round_trips_ms"]["histogram"]
        self.assertEqual(sum(entry["count"] for entry in bins), report["round_trips_ms"]["count"])
        self.assertGreater(len(report["scratch"]["trials"]), 3)

    def test_dry_run_writes_nothing(self):
        """A dry run writes nothing, and tells fields, limits, first batch and bench time."""
        words = self.bench.tune_words(self.tap.link, "--dry-run", "--json", "--lanes", "0,2-5")
        done = self.bench.run(*words)
        self.assertEqual(done.returncode, 0, done.stderr)
        self.assertGreater(self.tap.frames, 5)
        self.assertEqual(self.tap.writes, [])
        self.assertFalse(self.store.exists())
        preview = strict(done.stdout)
        self.assertEqual([lane["lane"] for lane in preview["lanes"]], [0, 2, 3, 4, 5])
        for lane in preview["lanes"]:
            fields = {f"{f['register']}.{f['field']}": f for f in lane["may_write"]}
            self.assertLess({"EQ_R1.code", "EQ_C2.code", "RX_CTL.hold_loops", "NOTE.value",
                             "MON_SETUP.dwell_log2"}, set(fields))
            self.assertEqual((fields["EQ_R1.code"]["lowest"], fields["EQ_R1.code"]["highest"],
                              fields["EQ_R1.code"]["present"]), (0, 31, 28))
            self.assertNotIn("RX_CTL.termination_trim", fields)
            self.assertGreater(len(lane["first_batch"]), 0)
            self.assertGreater(lane["bench_s_at_most"], 1)

    def test_a_run_writes_only_what_the_dry_run_names(self):
        """A run writes no field that the dry run did not name, strobes and triggers apart."""
        preview = strict(self.bench.run(*self.bench.tune_words(
            self.target.link, "--dry-run", "--json")).stdout)
        allowed = {}
        for lane in preview["lanes"]:
            for field in lane["may_write"]:
                address = int(field["address"], 16)
                allowed[address] = allowed.get(address, 0) | int(field["mask"], 16)
        for lane in range(8):
            allowed[0x100 + 0x40 * lane + 4] = allowed[0x100 + 0x40 * lane + 9] = 1
        self.bench.tune(self.tap.link)
        self.assertGreater(len(self.tap.writes), 1000)
        for address, mask, value in self.tap.writes:
            self.assertIn(address, allowed)
            self.assertEqual((0xFFFFFFFF if mask is None else mask) & ~allowed[address], 0,
                             hex(address))

    def test_lanes(self):
        """--lanes 0,2-5 tunes these and leaves the others' codes alone."""
        former = self.bench.codes_on_board(self.target.link)
        result = self.tuned("--lanes", "0,2-5")
        self.assertEqual([lane["lane"] for lane in result["lanes"]], [0, 2, 3, 4, 5])
        on_board = self.bench.codes_on_board(self.target.link)
        for lane, (_, codes) in decisions(result).items():
            self.assertEqual(on_board[lane], codes)
        for lane in (1, 6, 7):
            self.assertEqual(on_board[lane], former[lane])

    def test_afterwards_restore(self):
        """A recipe that restores afterwards leaves the board as it was found."""
        former = self.bench.codes_on_board(self.target.link)
        recipe = self.bench.changed(self.bench.recipe, "recipe.json",
                                    lambda recipe: recipe.update(afterwards="restore"))
        code, result, said = self.bench.tune(self.target.link, recipe=recipe)
        self.assertEqual(code, 0, said)
        self.assertNotEqual(result["lanes"][7]["codes"], former[7])
        self.assertEqual(self.bench.codes_on_board(self.target.link), former)

    def test_apply_and_former(self):
        """apply --former brings back the codes before the run, apply those of the run."""
        former = self.bench.codes_on_board(self.target.link)
        result = self.tuned()
        for words, wanted in ((("--former",), former),
                              ((), {lane["lane"]: lane["codes"] for lane in result["lanes"]})):
            done = self.bench.run("apply", "--store", self.store, "--board", self.bench.board,
                                  "--link", self.target.link, result["run"], "--json", *words)
            self.assertEqual(done.returncode, 0, done.stderr)
            said = strict(done.stdout)
            self.assertEqual({lane["lane"]: lane["codes"] for lane in said["lanes"]}, wanted)
            self.assertEqual(self.bench.codes_on_board(self.target.link), wanted)

    def test_apply_to_another_board_is_refused(self):
        """apply to a board with another serial number is refused before any write."""
        result = self.tuned()
        self.target.stop()
        another = {"wrong_identity": {"SERIAL.value": 7}}
        with Target(self.bench, changes={"faults": another}) as other:
            with Tap(other.tcp) as tap:
                done = self.bench.run("apply", "--store", self.store, "--board", self.bench.board,
                                      "--link", tap.link, result["run"], "--json")
                self.assertEqual(done.returncode, 78, done.stderr)
                self.assertEqual(strict(done.stdout)["error"]["cause"], "wrong board")
                self.assertGreater(tap.frames, 0)
                self.assertEqual(tap.writes, [])

    def test_writes_by_hand(self):
        """The exported writes, carried out by hand on a fresh board, give the run's codes."""
        result = self.tuned()
        done = self.bench.run("export", "--store", self.store, "latest", "--as", "writes")
        self.target.stop()
        with Target(self.bench) as fresh:
            with Host(fresh.tcp) as host:
                self.assertEqual(host.read(0), 0x4F5A5238)
                for _, _, address, mask, value, _ in written_lines(done.stdout):
                    host.write(address, mask, value)
            self.assertEqual(self.bench.codes_on_board(fresh.link),
                             {lane["lane"]: lane["codes"] for lane in result["lanes"]})

    def test_default_store(self):
        """Without --store the store is below XDG_STATE_HOME."""
        words = ["tune", "--board", self.bench.board, "--recipe", self.bench.recipe, "--link",
                 self.target.link, "--lanes", "0"]
        self.assertEqual(self.bench.run(*words).returncode, 0)
        self.assertTrue(self.bench.path("state/lanewright/store.db").exists())
        done = self.bench.run("show", "latest")
        self.assertEqual(done.returncode, 0, done.stderr)

    def test_serial_link(self):
        """check and tune reach the board over a serial port named with --link."""
        self.target.stop()
        with Target(self.bench, tcp=False, pty=True) as serial:
            self.assertEqual(self.bench.run("check", "--board", self.bench.board, "--link",
                                            serial.link).returncode, 0)
            code, result, said = self.bench.tune(serial.link, "--lanes", "1")
            self.assertEqual(code, 0, said)

    def test_lanes_that_cannot_meet(self):
        """A margin that no lane can have ends with exit 1 and the verdict fails."""
        recipe = self.bench.changed(self.bench.recipe, "recipe.json",
                                    lambda recipe: recipe["required"].update(height_mv=700))
        code, result, said = self.bench.tune(self.target.link, recipe=recipe)
        self.assertEqual(code, 1, said)
        self.assertEqual(result["status"], "complete")
        self.assertEqual({lane["verdict"] for lane in result["lanes"]}, {"fails"})


class Refusals(unittest.TestCase):
    """Exit codes of sysexits.h, and the error as an object with --json."""

    @classmethod
    def setUpClass(cls):
        cls.bench = Bench()
        cls.target = Target(cls.bench)
        cls.at_board = ["--board", cls.bench.board, "--link", cls.target.link]
        cls.tune = ["tune", *cls.at_board, "--recipe", cls.bench.recipe, "--store",
                    cls.bench.path("store.db")]

    @classmethod
    def tearDownClass(cls):
        cls.target.stop()
        cls.bench.close()

    def refused(self, code, *words):
        """Runs it as it is and with --json; the message."""
        plain = self.bench.run(*words)
        self.assertEqual(plain.returncode, code, plain.stderr)
        self.assertEqual(plain.stdout, "")
        self.assertIn("lanewright: ", plain.stderr)
        if words and words[0] in ("check", "tune", "runs", "show", "apply"):
            done = self.bench.run(*words, "--json")
            self.assertEqual(done.returncode, code, done.stderr)
            error = strict(done.stdout)["error"]
            self.assertEqual(error["exit"], code)
            self.assertTrue(error["what"])
            self.assertTrue(error["cause"])
        return plain.stderr

    def test_usage(self):
        """Words that cannot be used end with 64 and say what was expected."""
        for words, said in (
                ((), "Try"), (("tun",), 'did you mean "tune"'), (("frobnicate",), "no verb"),
                (("--frobnicate",), "Try"), (("tune", "--frobnicate"), "Try"),
                (("tune", "--board", self.bench.board), "--recipe"),
                (("show",), "run"), (("export", "latest"), "--as"),
                (("export", "latest", "--as", "xml"), "csv"),
                ((*self.tune, "--lanes", "8"), "0 to 7"), ((*self.tune, "--lanes", "5-2"), "5-2"),
                ((*self.tune, "--lanes", "0,,1"), "--lanes"), ((*self.tune, "--lanes", "x"), "x"),
                ((*self.tune, "--lanes", "-1"), "--lanes"),
                ((*self.tune, "--tag", "chip"), "KEY=VALUE"), ((*self.tune, "--tag", "=7"), "KEY"),
                ((*self.tune, "--tag", "a=1", "--tag", "a=2"), "twice"),
                ((*self.tune, "--seed", "x"), "--seed"), ((*self.tune, "--seed", "-1"), "--seed"),
                ((*self.tune, "--threads", "0"), "--threads"),
                (("check", "--board", self.bench.board, "--link", "10.0.0.1:5"), "tcp:HOST:PORT"),
                (("check", "--board", self.bench.board, "--link", "tcp:localhost:0"), "--link")):
            with self.subTest(words=words[-2:]):
                self.assertIn(said, self.refused(64, *words))

    def test_missing_tag(self):
        """A tag that the recipe requires and that is not given ends with 64 and is named."""
        recipe = self.bench.changed(self.bench.recipe, "tags.json",
                                    lambda recipe: recipe.update(required_tags=["wafer"]))
        said = self.refused(64, "tune", *self.at_board, "--recipe", recipe)
        self.assertIn("--tag wafer=", said)

    def test_help(self):
        """--help and --version answer on stdout with exit 0."""
        for words in (("--help",), ("--version",), ("tune", "--help"), ("check", "--help"),
                      ("runs", "--help"), ("show", "--help"), ("export", "--help"),
                      ("apply", "--help")):
            done = self.bench.run(*words)
            self.assertEqual(done.returncode, 0, words)
            self.assertIn("lanewright" if words == ("--version",) else "--help", done.stdout)

    def test_unknown_run(self):
        """An unknown run id ends with 65 and says how to list the runs."""
        store = self.bench.path("known.db")
        self.assertEqual(self.bench.tune(self.target.link, "--lanes", "0", store=store)[0], 0)
        for words in (("show", "--store", store, "20200101T000000-00000000"),
                      ("export", "--store", store, "no-such", "--as", "csv"),
                      ("apply", "--store", store, *self.at_board, "no-such")):
            with self.subTest(verb=words[0]):
                self.assertIn("lanewright runs", self.refused(65, *words))

    def test_dubious_store(self):
        """A file that is no store ends with 65 and stays as it is."""
        path = self.bench.path("no-store.db")
        path.write_text("this is no database, but somebody may still want it\n" * 20)
        for words in (("runs", "--store", path), ("show", "--store", path, "latest"),
                      ("tune", *self.at_board, "--recipe", self.bench.recipe, "--store", path)):
            with self.subTest(verb=words[0]):
                self.assertIn(str(path), self.refused(65, *words))
        self.assertTrue(path.read_text().startswith("this is no database"))

    def test_no_store(self):
        """A store that is not there is named, with exit 74, and is not made by looking."""
        path = self.bench.path("nowhere.db")
        self.assertIn(str(path), self.refused(74, "runs", "--store", path))
        self.assertFalse(path.exists())

    def test_nobody_at_the_port(self):
        """Nobody at the port ends with 69; the message names host and port."""
        said = self.refused(69, "check", "--board", self.bench.board, "--link", "tcp:127.0.0.1:1")
        self.assertIn("127.0.0.1:1", said)

    def test_no_such_serial_port(self):
        """A serial port that is not there ends with 69 and is named."""
        path = self.bench.path("no-such.tty")
        said = self.refused(69, "check", "--board", self.bench.board, "--link", f"serial:{path}")
        self.assertIn(str(path), said)

    def test_unwritable_paths(self):
        """A store or an output file that cannot be made ends with 74 and is named."""
        words = ["tune", *self.at_board, "--recipe", self.bench.recipe]
        self.assertIn("/dev/null/x", self.refused(74, *words, "--store", "/dev/null/x.db"))
        store = self.bench.path("for-out.db")
        self.assertEqual(self.bench.tune(self.target.link, "--lanes", "0", store=store)[0], 0)
        self.assertIn("/dev/null/y", self.refused(74, "export", "--store", store, "latest", "--as",
                                                  "csv", "--out", "/dev/null/y"))


if __name__ == "__main__":
    unittest.main(verbosity=2)
