"""Replay and import as users run them: a run over the simulated board replays strictly, one altered
count stops it by name, other recipes decide on its log, and what was exported reads back alike.
"""

import csv
import json
import pathlib
import sqlite3
import sys
import unittest

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
from workbench import SOURCE, Bench, Target, too_wide  # noqa: E402

COLUMNS = SOURCE / "configs/columns/demo.json"


class WithRun(unittest.TestCase):
    @classmethod
    def setUpClass(cls):
        cls.bench = Bench()
        cls.store = cls.bench.path("store.db")
        cls.target = Target(cls.bench)
        code, cls.result, errors = cls.bench.tune(cls.target.link, "--lanes", "1,3",
                                                  "--condition", "25C, nominal")
        assert code in (0, 1), errors
        cls.run_id = cls.result["run"]
        cls.target.stop()

    @classmethod
    def tearDownClass(cls):
        cls.bench.close()

    def verb(self, *words, store=None):
        done = self.bench.run(words[0], "--store", store or self.store, *words[1:])
        self.assertNotIn("unexpected", done.stderr)
        return done

    def json_of(self, *words, store=None, code=0):
        done = self.verb(*words, "--json", store=store)
        self.assertEqual(done.returncode, code, done.stdout + done.stderr)
        return json.loads(done.stdout)

    def recipe(self, name, **changes):
        return self.bench.changed(SOURCE / "configs/recipes/demo.json", name,
                                  lambda recipe: recipe.update(changes))

    def altered(self, name, change):
        """A copy of the store after change(connection)."""
        path = self.bench.path(name)
        with sqlite3.connect(self.store) as source, sqlite3.connect(path) as copy:
            source.backup(copy)
            change(copy)
        source.close()
        copy.close()
        return path


class Strict(WithRun):
    def test_the_run_replays_the_same(self):
        """Every event, reading and register operation is what the program does again."""
        report = self.json_of("replay", self.run_id, "--strict")
        self.assertIs(report["same"], True)
        self.assertIsNone(report["difference"])
        self.assertEqual([lane["lane"] for lane in report["lanes"]], [1, 3])
        for lane, result in zip(report["lanes"], self.result["lanes"]):
            self.assertEqual(lane["finished"], True)
            self.assertGreaterEqual(lane["reading_count"], result["reading_count"])
            self.assertGreater(lane["operation_count"], 10 * lane["reading_count"])
        text = self.verb("replay", "latest", "--strict")
        self.assertEqual(text.returncode, 0)
        self.assertEqual(too_wide(text.stdout), [])
        self.assertIn("the same program gives what is stored", text.stdout)

    def alter_one_result(self, register):
        """Adds one to the result of the read of that address in lane 3's reading 5."""
        def change(store):
            (event, wire), = store.execute("SELECT event, wire FROM readings WHERE lane = 3 AND "
                                           "ordinal = 5").fetchall()
            operations = json.loads(wire)
            self.at = max(i for i, op in enumerate(operations)
                          if op[0] == 0 and op[1] == register)
            operations[self.at][4] += 1
            store.execute("UPDATE readings SET wire = ? WHERE event = ?",
                          (json.dumps(operations), event))
        return change

    def test_one_altered_count_is_named(self):
        """It stops there: run, lane, reading, operation, register, expected and found."""
        # Lane 3's block begins at 0x1C0; MON_UP is 0x0B in it.
        path = self.altered("altered.db", self.alter_one_result(0x1C0 + 0x0B))
        report = self.json_of("replay", self.run_id, "--strict", store=path, code=65)
        self.assertIs(report["same"], False)
        at = report["difference"]
        self.assertEqual(at["run"], self.run_id)
        self.assertEqual(at["lane"], 3)
        self.assertEqual(at["ordinal"], 5)
        self.assertEqual(at["operation"], self.at)
        self.assertEqual(at["register"], "MON_UP.steps")
        self.assertEqual(int(at["found"], 16), int(at["expected"], 16) + 1)
        text = self.verb("replay", self.run_id, "--strict", store=path)
        self.assertEqual(text.returncode, 65)
        for word in ("DIFFERENCE", "lane 3", "reading 5", f"operation {self.at}", "MON_UP.steps"):
            self.assertIn(word, " ".join(text.stdout.split()))
        self.assertEqual(too_wide(text.stdout), [])

    def test_other_alterations_are_found(self):
        """A margin, a request, a decision, left codes, a missing reading, a changed recipe, the noise
        that the lanes were given, the board's identity."""
        def sql(statement):
            return lambda store: self.assertGreater(store.execute(statement).rowcount, 0)
        cases = {
            "margin": sql("UPDATE readings SET down_mv = down_mv + 2 WHERE lane = 1 AND "
                          "ordinal = 2"),
            "request": sql("UPDATE events SET body = replace(body, '\"dwell_bits\":', "
                           "'\"dwell_bits\":1') WHERE kind = 'intent' AND lane = 3"),
            "decision": sql("UPDATE events SET body = replace(body, '\"reading_count\":', "
                            "'\"reading_count\":1') WHERE kind = 'lane_decided' AND lane = 3"),
            "settled": sql("UPDATE events SET body = replace(body, '\"codes\":[', '\"codes\":[1') "
                           "WHERE kind = 'lane_settled' AND lane = 1"),
            "reading": lambda store: [store.execute(s) for s in (
                "DELETE FROM events WHERE seq = (SELECT event FROM readings WHERE lane = 1 AND "
                "ordinal = 4)", "DELETE FROM readings WHERE lane = 1 AND ordinal = 4")],
            "noise": sql("UPDATE events SET body = replace(body, '\"height_sigma_mv\":', "
                         "'\"height_sigma_mv\":1') WHERE kind = 'noise_chosen'"),
            "identity": sql("UPDATE events SET body = replace(body, '104729', '104730') "
                            "WHERE kind = 'identified'"),
            "recipe": sql("UPDATE runs SET manifest = replace(manifest, 'Coordinate descent', "
                          "'Coordinate ascent')"),
        }
        for name, change in cases.items():
            with self.subTest(name):
                path = self.altered(f"{name}.db", change)
                done = self.verb("replay", self.run_id, "--strict", store=path)
                self.assertEqual(done.returncode, 65, done.stdout + done.stderr)


class Recipes(WithRun):
    def test_the_same_recipe_decides_the_same(self):
        """Reading by reading, with nothing asked for that was never read."""
        report = self.json_of("replay", self.run_id, "--recipe", SOURCE
                              / "configs/recipes/demo.json")
        self.assertIs(report["simulated"], True)
        for lane, result in zip(report["lanes"], self.result["lanes"]):
            self.assertEqual(lane["codes"], result["codes"])
            self.assertEqual(lane["codes_then"], result["codes"])
            self.assertEqual(lane["never_read_count"], 0)
            self.assertIsNone(lane["same_until"])
            self.assertIsNotNone(lane["fresh"])

    def test_other_recipes_decide_on_the_log(self):
        """Another strategy, budget and requirement: a grid that was hardly read decides nothing, and
        codes never read are counted and listed.
        """
        other = self.recipe("other.json", strategy={"name": "exhaustive", "stride": 8},
                            budget={"standard_readings": 0, "bench_s": 0},
                            required={"error_ratio": 1e-6, "height_mv": 60, "width_ui": 0.2})
        report = self.json_of("replay", self.run_id, "--recipe", other, code=65)
        self.assertEqual(report["required"],
                         {"error_ratio": 1e-6, "height_mv": 60, "width_ui": 0.2})
        rows = self.bench.readings(self.run_id)
        for lane in report["lanes"]:
            logged = {tuple(int(row[f"{name}_code"]) for name in ("r1", "r2", "c1", "c2"))
                      for row in rows if int(row["lane"]) == lane["lane"]}
            self.assertGreater(lane["never_read_count"], 0)
            self.assertEqual(lane["never_read_count"], len(lane["never_read"]))
            for codes in lane["never_read"]:
                self.assertNotIn(tuple(codes.values()), logged)
            self.assertIsNone(lane["codes"])
            self.assertIsNone(lane["fresh"])
            self.assertIn("codes asked for were never read", lane["cause"])
            self.assertIsNotNone(lane["same_until"])
        text = self.verb("replay", self.run_id, "--recipe", other)
        self.assertEqual(text.returncode, 65)
        self.assertEqual(too_wide(text.stdout), [])
        self.assertIn("SIMULATED", text.stdout)
        self.assertIn("no decision: ", text.stdout)

    def test_wrong_use_and_wrong_recipes(self):
        """Neither or both of --strict and --recipe: 64; a bad recipe: 78; no such ratio: 65."""
        demo = SOURCE / "configs/recipes/demo.json"
        self.assertEqual(self.verb("replay", "latest").returncode, 64)
        self.assertEqual(self.verb("replay", "latest", "--strict", "--recipe", demo).returncode, 64)
        bad = self.recipe("bad.json", strategy={"name": "descend"})
        done = self.verb("replay", "latest", "--recipe", bad)
        self.assertEqual(done.returncode, 78)
        self.assertIn("descent", done.stderr)
        ratio = self.recipe("ratio.json", search_error_ratio=1e-8)
        done = self.verb("replay", "latest", "--recipe", ratio)
        self.assertEqual(done.returncode, 65)
        self.assertIn("search_error_ratio", " ".join(done.stdout.split()))
        self.assertEqual(self.verb("replay", "nosuch", "--strict").returncode, 65)


class Import(WithRun):
    def imported(self, readings, store, *more, columns=COLUMNS):
        return self.bench.run("import", "--store", store, "--readings", readings, "--columns",
                              columns, *more)

    @staticmethod
    def alike(value):
        """Without what only a board file states: the tolerance of the monitor's step."""
        if not isinstance(value, dict):
            return value
        return {key: each for key, each in value.items() if "_systematic_" not in key}

    def exported(self, name="export.csv"):
        path = self.bench.path(name)
        done = self.verb("export", self.run_id, "--as", "csv", "--out", path)
        self.assertEqual(done.returncode, 0, done.stderr)
        return path

    def test_an_export_reads_back_to_the_same_replay(self):
        """With the board's file, and with the column map's own description of it."""
        exported = self.exported()
        other = self.recipe("other.json", budget={"standard_readings": 30, "bench_s": 0})
        wanted = self.json_of("replay", self.run_id, "--recipe", other)
        for name, words in (("file", ("--board", self.bench.board)), ("map", ())):
            with self.subTest(name):
                store = self.bench.path(f"imported-{name}.db")
                done = self.imported(exported, store, "--json", *words)
                self.assertEqual(done.returncode, 0, done.stdout + done.stderr)
                report = json.loads(done.stdout)
                self.assertEqual(report["rejected"], [])
                self.assertEqual(report["unknown"], [])
                self.assertEqual(report["runs"][0]["condition"], "25C, nominal")
                found = self.json_of("replay", "latest", "--recipe", other, store=store)
                self.assertIs(found["imported"], True)
                self.assertIs(found["simulated"], True)
                for lane, other_lane in zip(wanted["lanes"], found["lanes"]):
                    for key in ("codes", "reason", "never_read", "reading_count", "selected",
                                "same_until", "standard_readings"):
                        self.assertEqual(self.alike(lane[key]), self.alike(other_lane[key]), key)
                again = self.verb("export", "latest", "--as", "csv", store=store)
                self.assertEqual(again.returncode, 0)

    def test_an_imported_run_is_shown_as_such_and_never_applied(self):
        """show, runs and export say where it comes from; strict replay and apply refuse it."""
        store = self.bench.path("shown.db")
        done = self.imported(self.exported("shown.csv"), store, "--board", self.bench.board)
        self.assertEqual(done.returncode, 0, done.stderr)
        shown = self.verb("show", "latest", store=store)
        self.assertEqual(shown.returncode, 0, shown.stderr)
        self.assertIn("IMPORTED", shown.stdout)
        self.assertIn("SIMULATED", shown.stdout)
        self.assertEqual(self.verb("runs", store=store).returncode, 0)
        strict = self.verb("replay", "latest", "--strict", store=store)
        self.assertEqual(strict.returncode, 65)
        self.assertIn("imported", strict.stderr)
        applied = self.verb("apply", "--board", self.bench.board, "latest", "--former", store=store)
        self.assertNotEqual(applied.returncode, 0)

    def test_rejected_rows_are_listed(self):
        """Good rows are taken, the others listed with line and reason, and the exit code says so."""
        lines = self.exported("damaged.csv").read_text().splitlines()
        cells = next(csv.reader([lines[3]]))
        cells[lines[0].split(",").index("r1_code")] = "77"
        lines[3] = ",".join('"' + cell.replace('"', '""') + '"' for cell in cells)
        lines[5] += ",one more"
        lines[7] = 'a"b' + lines[7]
        damaged = self.bench.path("damaged.csv")
        damaged.write_text("\r\n".join(lines) + "\r\n")
        store = self.bench.path("damaged.db")
        done = self.imported(damaged, store, "--json")
        self.assertEqual(done.returncode, 65)
        report = json.loads(done.stdout)
        self.assertEqual([row["line"] for row in report["rejected"]], [4, 6, 8])
        self.assertEqual(report["rejected"][0]["column"], "r1_code")
        self.assertEqual(report["row_count"], len(lines) - 1)
        self.assertEqual(report["runs"][0]["row_count"], len(lines) - 4)
        for line in (4, 6, 8):
            self.assertIn(f"damaged.csv:{line}: ", done.stderr)
        dry = self.imported(damaged, self.bench.path("dry.db"), "--dry-run")
        self.assertEqual(dry.returncode, 65)
        self.assertFalse(self.bench.path("dry.db").exists())

    def test_files_that_cannot_be_taken(self):
        """No such file 74, a map with mistakes 78, a column that is not there 65."""
        store = self.bench.path("none.db")
        self.assertEqual(self.imported(self.bench.path("no.csv"), store).returncode, 74)
        bad = self.bench.changed(COLUMNS, "bad-map.json", lambda m: m.update(pattern=3))
        done = self.imported(self.exported("good.csv"), store, columns=bad)
        self.assertEqual(done.returncode, 78)
        self.assertIn("/pattern", done.stderr)
        other = self.bench.changed(COLUMNS, "other-map.json",
                                   lambda m: m["codes"][0].update(column="R1"))
        done = self.imported(self.exported("good.csv"), store, columns=other)
        self.assertEqual(done.returncode, 65)
        self.assertIn('"R1"', done.stderr)
        self.assertFalse(store.exists())


if __name__ == "__main__":
    unittest.main(verbosity=2)
