"""Holds the target file's schema and its decoder to the same good and bad files.

usage: target_schema_test.py PROGRAM SCHEMA DEMO_TARGET
Each case changes the demo target in one place; the schema and `PROGRAM truth` must agree on
whether it is still good.
"""

import copy
import json
import os
import subprocess
import sys
import tempfile

import jsonschema

GONE = object()

GOOD = [
    ("package", GONE), ("package/near", GONE), ("stub", GONE), ("stub/near", {"length_mm": 0.4}),
    ("crosstalk", []), ("crosstalk/0/phase_ui", 0.3), ("compression", GONE), ("process", GONE),
    ("process/resistor_scale", 1.1), ("temperature/celsius", -40), ("transmitter/post_tap", 0.1),
    ("line/steps", [{"at_share": 0.4, "impedance_ohm": 55}]), ("lanes/0/swing_mv", 900),
    ("lanes/0/compression", {"knee_mv": 250}), ("lanes/0/line/roughness_um", 0.2),
    ("seed", 7), ("seed", "0x1F"), ("time_scale", 0), ("sampler", GONE), ("line", GONE),
    ("lanes/0/line/length_mm", 12.5), ("receiver/banks/c1/plate_share", 0.1),
    ("receiver/load_ohm", 10000), ("noise/jitter_ui", GONE), ("monitor/width_steps_max", 63),
    ("monitor/errors_against", "decision"), ("monitor/gain_tolerance", GONE), ("lock", GONE),
    ("lock/regained_below_ui", GONE), ("write_effects", GONE), ("telemetry", GONE),
    ("failures", {"reference_clock": "off", "no_lock": [1], "swapped": [[0, 1], [4, 2]],
                  "repeatability_times": 5, "parallel_offset_mv": -3,
                  "foreign_writes": [{"lane": 2, "dimension": "c1", "code": 3, "at_batches": [7]}]}),
]
BAD = [
    ("package/near/length_mm", GONE), ("package/middle", {"length_mm": 3}), ("stub/far/length_mm", 0),
    ("crosstalk/0/kind", "sideways"), ("crosstalk/0/coupling_db", 3), ("compression/knee_mv", 0),
    ("process/resistor_sigma", 1), ("temperature/celsius", GONE), ("temperature/celsius", -300),
    ("noise/temperature_k", 300), ("transmitter/pre_tap", 0.7), ("lanes/0/swing_mv", 0),
    ("line/steps", [{"at_share": 1.5, "impedance_ohm": 55}]), ("population", {"boards": 1, "lanes": 1}),
    ("format", "lanewright-target/0"), ("format", GONE), ("name", 5), ("name", GONE), ("seed", -1),
    ("seed", 1.5), ("time_scale", -1), ("bit_rate_gbps", 0), ("bit_rate_gbps", "25"),
    ("colour", "red"), ("transmitter/swing_mv", 0), ("transmitter/swing_mv", GONE),
    ("transmitter/rise_ns", 1), ("receiver/banks/r1/bits", 9), ("receiver/banks/r1/unit_ff", 1),
    ("receiver/banks/c2/fixed_ff", 0), ("receiver/banks/c2", GONE), ("receiver", []),
    ("noise/sampler_mv", 0), ("noise/jitter_ui", 0.5), ("sampler/phase_sigma_ui", 1),
    ("monitor/height_step_mv", 0), ("monitor/error_ratio", 0.5),
    ("monitor/errors_against", "both"), ("monitor/nonlinearity_steps", 0.6),
    ("monitor/event_share", 1.5), ("monitor/drift_time_s", 0), ("lock/lost_above_ui", 0),
    ("lock/colour", 1), ("write_effects/settle_time_us", -1), ("telemetry/supply_mv", "900"),
    ("failures", {"no_lock": [64]}), ("failures", {"swapped": [[1]]}),
    ("failures", {"settle_times": 0.5}), ("failures", {"reference_clock": "slow"}),
    ("failures", {"foreign_writes": [{"lane": 2, "dimension": "c1", "code": 3}]}),
    ("failures", {"foreign_writes": [{"lane": 2, "dimension": "c3", "code": 3, "at_batches": [1]}]}),
    ("failures", {"foreign_writes": [{"lane": 2, "dimension": "c1", "code": 3, "at_batches": [0]}]}),
 ("required/width_ui", 2),
    ("required/height_mv", GONE), ("reset_codes/r1", -1), ("reset_codes/c3", 0), ("lanes", []),
    ("lanes/0", {}), ("lanes/0/line/length_mm", 0), ("lanes/0/line/colour", 1),
    ("lanes/0/touchstone", {"file": "a.s4p"}),
    ("lanes/1", {"touchstone": {"file": "a.s4p", "near": [1, 2, 3]}}),
    ("lanes/1", {"touchstone": {"near": [1, 2]}}), ("lanes/2", {"touchstone": {"file": "a.s2p", "repeat": 0}}),
]


def changed(target, path, value):
    target = copy.deepcopy(target)
    *way, last = path.split("/")
    at = target
    for key in way:
        at = at[int(key)] if isinstance(at, list) else at[key]
    if value is GONE:
        del at[last]
    elif isinstance(at, list):
        at[int(last)] = value
    else:
        at[last] = value
    return target


def main():
    program, schema_path, demo_path = sys.argv[1:4]
    with open(schema_path, encoding="utf-8") as file:
        schema = json.load(file)
    jsonschema.Draft202012Validator.check_schema(schema)
    validator = jsonschema.Draft202012Validator(schema)
    with open(demo_path, encoding="utf-8") as file:
        demo = json.load(file)
    # The board file keeps its place although the changed targets lie elsewhere.
    if "board" in demo:
        demo["board"] = os.path.relpath(
            os.path.join(os.path.dirname(os.path.abspath(demo_path)), demo["board"]),
            tempfile.gettempdir())
    failures = 0
    cases = [(path, value, True) for path, value in GOOD] + [(path, value, False) for path, value in BAD]
    with tempfile.NamedTemporaryFile("w", suffix=".json", dir=tempfile.gettempdir()) as file:
        for path, value, good in cases:
            target = changed(demo, path, value)
            file.seek(0)
            file.truncate()
            json.dump(target, file)
            file.flush()
            schema_says = validator.is_valid(target)
            run = subprocess.run(
                [program, "truth", "--target", file.name, "--lane", "0", "--codes", "r1=0,c1=0,r2=0,c2=0"],
                capture_output=True, text=True, timeout=60, check=False)
            decoder_says = run.returncode == 0
            if not decoder_says and run.returncode != 78:
                print(f"{path}: exit {run.returncode} instead of 78: {run.stderr}")
                failures += 1
            if schema_says != good or decoder_says != good:
                shown = "absent" if value is GONE else json.dumps(value)
                print(f"{path} = {shown}: should be {'good' if good else 'bad'}, schema says "
                      f"{schema_says}, decoder says {decoder_says}\n{run.stderr}")
                failures += 1
    print(f"{len(cases)} files, {failures} disagreements")
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main())
