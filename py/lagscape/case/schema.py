"""The case file's JSON Schema (draft 2020-12), made from the loops' own specifications so that the two cannot drift apart.

`python -m lagscape.case.schema > case.schema.json` writes the published file; a test compares them.
"""

from __future__ import annotations

import json
from importlib import resources
from typing import Any

from lagscape.case.case import LARGEST_SETTING, MOST_LEVERS, disturbance_units, largest_spread, specifications
from lagscape.case.case_file import FORMAT, size_key, spread_key
from lagscape.case.migrate import NEWEST_VERSION
from lagscape.case.parameters import Basis, ParameterSpecification
from lagscape.loops.register import LOOPS

__all__ = ["case_schema", "published_schema", "schema_text"]


def published_schema() -> dict[str, Any]:
    """The schema as the package carries it."""
    return json.loads(resources.files("lagscape.case").joinpath("case.schema.json").read_text(encoding="utf-8"))


def case_schema() -> dict[str, Any]:
    """The schema of the newest version's layout, from the specifications."""
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "$id": f"urn:lagscape:case:{NEWEST_VERSION}",
        "title": "Lagscape case",
        "description": "One feedback loop's numbers, settings, levers and disturbance. Key names end in units. It holds no name, "
        "patient number or date of birth.",
        "type": "object",
        "required": ["format", "version", "loop", "starting_case", "numbers", "choices", "levers", "disturbance"],
        "properties": {
            "format": {"const": FORMAT},
            "version": {"const": NEWEST_VERSION},
            "loop": {"enum": list(LOOPS)},
            "starting_case": {"type": ["string", "null"]},
            "numbers": {"type": "object"},
            "choices": {"type": "object"},
            "levers": {
                "description": "Levers laid on the case; a lever's name ends in the unit of its dose.",
                "type": "array",
                "maxItems": MOST_LEVERS,
                "items": {
                    "type": "object",
                    "required": ["name", "dose"],
                    "properties": {
                        "name": {"type": "string", "pattern": "^[a-z][a-z0-9_]{0,47}$"},
                        "dose": {"type": "number", "minimum": -LARGEST_SETTING, "maximum": LARGEST_SETTING},
                    },
                    "additionalProperties": False,
                },
            },
            "disturbance": {"type": ["object", "null"]},
        },
        "additionalProperties": False,
        "oneOf": [_loop_schema(kind) for kind in LOOPS],
    }


def schema_text() -> str:
    """`case_schema` as the text of the published file."""
    return json.dumps(case_schema(), indent=2, ensure_ascii=False) + "\n"


def _loop_schema(kind: str) -> dict[str, Any]:
    loop = LOOPS[kind]
    known = specifications(kind)
    return {
        "title": loop.title,
        "properties": {
            "loop": {"const": kind},
            "starting_case": {"enum": [*(item.name for item in loop.starting_cases), None]},
            "numbers": {
                "required": list(known),
                "properties": {name: _number_schema(item) for name, item in known.items()},
                "additionalProperties": False,
            },
            "choices": {
                "required": [item.name for item in loop.choices],
                "properties": {item.name: {"description": item.meaning, "enum": list(item.options)} for item in loop.choices},
                "additionalProperties": False,
            },
            "disturbance": {"oneOf": [{"type": "null"}, *(_disturbance_schema(*item) for item in disturbance_units(kind).items())]},
        },
    }


def _number_schema(item: ParameterSpecification) -> dict[str, Any]:
    key = spread_key(item.distribution)
    unit = item.unit or "no unit"
    spread_words = "One standard deviation, " + ("of the natural logarithm." if key == "spread_of_log" else f"{unit}.")
    return {
        "title": item.label,
        "description": f"{item.symbol}, {unit}. {item.meaning}",
        "type": "object",
        "required": ["value", "basis"],
        "properties": {
            "value": {"type": "number", "minimum": item.minimum, "maximum": item.maximum},
            "basis": {"enum": [str(basis) for basis in Basis]},
            key: {"description": spread_words, "type": "number", "minimum": 0, "maximum": largest_spread(item)},
        },
        "additionalProperties": False,
    }


def _disturbance_schema(name: str, unit: str) -> dict[str, Any]:
    key = size_key(unit)
    return {
        "type": "object",
        "required": ["name", key],
        "properties": {
            "name": {"const": name},
            key: {"description": unit, "type": "number", "minimum": -LARGEST_SETTING, "maximum": LARGEST_SETTING},
        },
        "additionalProperties": False,
    }


if __name__ == "__main__":
    print(schema_text(), end="")
