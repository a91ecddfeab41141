"""Malformed or missing files: the message names file, line, column and pointer, the exit code is
78, and the board is not even spoken to.
"""

import json
import pathlib
import re
import sys
import unittest

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
from wire_tap import Tap  # noqa: E402
from workbench import SOURCE, TARGET, Bench, Target  # noqa: E402

BOARD = (SOURCE / "configs/boards/demo.json").read_text()
RECIPE = (SOURCE / "configs/recipes/demo.json").read_text()
TARGET_FILE = (SOURCE / "configs/targets/demo.json").read_text()


def replaced(text, old, new):
    assert text.count(old) >= 1, f"{old} is not in the file"
    return text.replace(old, new, 1)


def place_of(text, marker):
    """Line and column (from 1) at which the marker begins."""
    before = text[:text.index(marker)]
    return before.count("\n") + 1, len(before) - (before.rfind("\n") + 1) + 1


class BadFiles(unittest.TestCase):
    @classmethod
    def setUpClass(cls):
        cls.bench = Bench()
        cls.target = Target(cls.bench)
        cls.tap = Tap(cls.target.tcp)
        cls.former = cls.bench.codes_on_board(cls.target.link)

    @classmethod
    def tearDownClass(cls):
        try:
            assert cls.bench.codes_on_board(cls.target.link) == cls.former
        finally:
            cls.tap.close()
            cls.target.stop()
            cls.bench.close()

    def written(self, name, text):
        path = self.bench.path(name)
        if isinstance(text, bytes):
            path.write_bytes(text)
        else:
            path.write_text(text)
        return path

    def refused(self, *parts, board=None, recipe=None):
        """Tunes with these files; the message, which has the parts, on stdout as on stderr."""
        done = self.bench.run(*self.bench.tune_words(self.tap.link, "--json", board=board,
                                                     recipe=recipe))
        self.assertEqual(done.returncode, 78, done.stderr)
        error = json.loads(done.stdout)["error"]
        self.assertEqual(error["exit"], 78)
        for part in parts:
            self.assertIn(part, done.stderr)
            self.assertIn(part, error["what"])
        self.assertEqual(self.tap.writes, [])
        self.assertFalse(self.bench.path("store.db").exists())
        return done.stderr

    def at(self, path, text, marker):
        line, column = place_of(text, marker)
        return f"{path}:{line}:{column}:"

    def bad_board(self, old, new, marker, *parts):
        text = replaced(BOARD, old, new)
        path = self.written("board.json", text)
        return self.refused(self.at(path, text, marker), *parts, board=path)

    def bad_recipe(self, old, new, marker, *parts):
        text = replaced(RECIPE, old, new)
        path = self.written("recipe.json", text)
        return self.refused(self.at(path, text, marker), *parts, recipe=path)

    def test_missing_files(self):
        """Files that are not there are named, both at once."""
        board, recipe = self.bench.path("none-board.json"), self.bench.path("none-recipe.json")
        self.refused(str(board), str(recipe), board=board, recipe=recipe)

    def test_a_folder_instead_of_a_file(self):
        """A folder in place of a file is named, nothing hangs."""
        self.refused(str(self.bench.folder), recipe=self.bench.folder)

    def test_empty_and_cut_files(self):
        """An empty file, and one that ends in the middle, name the place of the end."""
        self.refused("recipe.json:1:1", recipe=self.written("recipe.json", ""))
        cut = RECIPE[:RECIPE.index('"budget"') + 20]
        path = self.written("recipe.json", cut)
        self.refused(f"{path}:{cut.count(chr(10)) + 1}:", recipe=path)

    def test_not_json(self):
        """What is no JSON is refused with its place: binary bytes, comments, trailing commas."""
        binary = self.written("board.json", b"\x7fELF\x02\x01\0\xff\xfe")
        self.refused("board.json:1:", board=binary)
        self.bad_recipe('"dwell_s": 0.1,', '"dwell_s": 0.1, // long', "// long")
        self.bad_recipe('"seed": 1', '"seed": 1,', "}\n")

    def test_deep_nesting(self):
        """A file of nothing but brackets is refused, without a crash."""
        self.refused("recipe.json:1:", recipe=self.written("recipe.json", "[" * 200000))

    def test_unknown_key(self):
        """A misspelt key is named with pointer and suggestion."""
        self.bad_recipe('"dwell_s"', '"dwel_s"', '"dwel_s"', "/dwel_s", "dwell_s")
        self.bad_board('"bit_rate_gbps"', '"bit_rate_gpbs"', '"bit_rate_gpbs"', "bit_rate_gbps")

    def test_duplicate_key(self):
        """A key written twice is an error at its second place."""
        self.bad_recipe('"dwell_s": 0.1,', '"dwell_s": 0.1, "dwell_s" : 0.2,', '"dwell_s" :',
                        "dwell_s")

    def test_wrong_type(self):
        """A value of the wrong type says what was found and what was expected."""
        self.bad_recipe('"dwell_s": 0.1', '"dwell_s": "long"', '"long"', "/dwell_s", "found",
                        "expected")
        self.bad_board('"count": 8', '"count": "eight"', '"eight"', "/lanes/count")

    def test_out_of_range(self):
        """Numbers beyond what makes sense are errors, NaN and infinities too."""
        self.bad_recipe('"height_mv": 30', '"height_mv": -3', "-3", "/required/height_mv")
        self.bad_recipe('"height_mv": 30', '"height_mv": NaN', "NaN")
        self.bad_recipe('"height_mv": 30', '"height_mv": 1e999', "1e999")
        self.bad_board('"port": 40125', '"port": 70000', "70000", "/link/port")

    def test_fields_that_do_not_fit(self):
        """A dimension of a field that is not there, and overlapping fields, are errors."""
        self.bad_board('"field": "EQ_C2.code"', '"field": "EQ_C9.code"', '"EQ_C9.code"', "EQ_C2")
        said = self.bad_board('"name": "signal", "bits": "1"', '"name": "signal", "bits": "0"',
                              '{"name": "signal"', "bits")
        self.assertIn("lock", said)

    def test_wrong_format(self):
        """A recipe in place of the board file is recognised by its format."""
        self.refused("lanewright-board/1", board=self.written("board.json", RECIPE))
        self.bad_recipe("lanewright-recipe/1", "lanewright-recipe/99", '"lanewright-recipe/99"')

    def test_all_errors_at_once(self):
        """All errors of a file are reported at once, each with its own place."""
        text = replaced(replaced(replaced(RECIPE, '"dwell_s": 0.1', '"dwell_s": -1'),
                                 '"rounds": 2', '"rounds": "two"'),
                        '"afterwards": "leave"', '"afterwards": "run"')
        path = self.written("recipe.json", text)
        said = self.refused("3 errors", recipe=path)
        self.assertEqual(len(re.findall(re.escape(str(path)) + r":\d+:\d+: /", said)), 3)

    def test_recipe_against_board(self):
        """What a recipe asks and the board has not is an error at its place in the recipe."""
        self.bad_recipe('"c2"]', '"c9"]', '"c9"', "/dimensions/3")
        self.bad_recipe('"lanes": "all"', '"lanes": [0, 8]', "[0, 8]", "/lanes")
        self.bad_recipe('"descent_axes"', '"decent_axes"', '"decent_axes"', "descent_axes")

    def test_ratio_below_the_latched_monitor(self):
        """A recipe that asks for a lower error ratio than the monitor latches is refused."""
        said = self.bad_recipe('"error_ratio": 1e-06', '"error_ratio": 1e-12', "1e-12",
                               "/required/error_ratio")
        self.assertIn("1e-09", said)

    def test_ratio_that_one_look_cannot_show(self):
        """A search error ratio that one look of the dwell cannot show is refused."""
        text = replaced(RECIPE, '"search_error_ratio": 1e-06', '"search_error_ratio": 1e-08')
        text = replaced(text, '"dwell_s": 0.1', '"dwell_s": 1e-3')
        path = self.written("recipe.json", text)
        said = self.refused(self.at(path, text, "1e-08"), "/search_error_ratio", recipe=path)
        self.assertIn("dwell_s", said)

    def test_check_and_apply_refuse_too(self):
        """check and apply refuse a bad board file as tune does."""
        path = self.written("board.json", replaced(BOARD, '"count": 8', '"count": 0'))
        for words in (("check",), ("apply", "latest")):
            done = self.bench.run(*words, "--board", path, "--link", self.tap.link)
            self.assertEqual(done.returncode, 78, done.stderr)
            self.assertIn("/lanes/count", done.stderr)
        self.assertEqual(self.tap.writes, [])

    def test_bad_target_files(self):
        """The simulated board refuses bad target files with 78 and their place."""
        absolute = replaced(TARGET_FILE, "../boards/demo.json", str(SOURCE
                                                                    / "configs/boards/demo.json"))
        cases = [(replaced(absolute, '"time_scale": 1', '"time_scale": -1'), "-1", "/time_scale"),
                 (replaced(absolute, '"swing_mv"', '"swing_mw"'), '"swing_mw"', "swing_mv"),
                 (replaced(absolute, '"EQ_R1.code"', '"EQ_R9.code"'), '"EQ_R9.code"',
                  "/binding/r1"),
                 (replaced(absolute, '"shared_by": [[0, 1]', '"shared_by": [[0, 0]'), "0], [2",
                  "/binding/shared_by")]
        for text, marker, pointer in cases:
            with self.subTest(pointer=pointer):
                path = self.written("bad-target.json", text)
                done = self.bench.run("serve", "--target", path, "--tcp", "127.0.0.1:0",
                                      program=TARGET, timeout=20)
                self.assertEqual(done.returncode, 78, done.stderr)
                self.assertIn(self.at(path, text, marker), done.stderr)
                self.assertIn(pointer, done.stderr)
                self.assertNotIn("ready", done.stdout)


if __name__ == "__main__":
    unittest.main(verbosity=2)
