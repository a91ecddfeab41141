#!/usr/bin/env python3
"""Holds JSON files to a JSON Schema with an independent validator.

usage: check_schema.py SCHEMA FILE...    a line each: "accepts FILE" or "refuses FILE: why"
"""

import json
import sys

import jsonschema


def once(pairs):
    keys = [key for key, _ in pairs]
    if len(set(keys)) != len(keys):
        raise ValueError("duplicate key")
    return dict(pairs)


def no_constant(word):
    raise ValueError(f"{word} is not JSON")


def main():
    with open(sys.argv[1], encoding="utf-8") as file:
        schema = json.load(file)
    jsonschema.Draft202012Validator.check_schema(schema)
    validator = jsonschema.Draft202012Validator(schema)
    for path in sys.argv[2:]:
        try:
            with open(path, encoding="utf-8") as file:
                value = json.load(file, object_pairs_hook=once, parse_constant=no_constant)
            error = jsonschema.exceptions.best_match(validator.iter_errors(value))
            why = error and f"{error.json_path}: {error.message}"
        except (ValueError, RecursionError) as problem:
            why = str(problem)
        print(f"refuses {path}: {' '.join(why.split())[:200]}" if why else f"accepts {path}")


if __name__ == "__main__":
    main()
