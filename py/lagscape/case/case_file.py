"""The case file: JSON (RFC 8259) with a version, units in its key names and a published JSON Schema (`case.schema.json`).

    {"format": "lagscape-case", "version": 1, "loop": "breathing", "starting_case": "healthy-asleep",
     "numbers": {"resting_paco2_mmhg": {"value": 42.0, "basis": "measured", "spread": 1.0}, ...},
     "choices": {"drive_shape": "threshold", ...}, "levers": [{"name": ..., "dose": ...}],
     "disturbance": {"name": "sigh", "size_l_min": 10.0}}

A number's `spread` is one standard deviation in its own unit; `spread_of_log` is one of its natural logarithm, for numbers that
spread so. A lever's name ends in the unit of its dose. Floats are written with as many digits as bring back the same bits.

Whatever comes in is refused in one sentence, or is a whole case: nothing is guessed, nothing unknown is dropped in silence.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any, NoReturn

from lagscape.case.case import Case, DisturbanceSetting, LeverCheck, LeverSetting, Number, disturbance_units, specifications
from lagscape.case.migrate import NEWEST_VERSION, migrated
from lagscape.case.parts import shown
from lagscape.errors import CaseFormatError, InvalidInputError

__all__ = [
    "FORMAT",
    "LARGEST_FILE_BYTES",
    "case_from_document",
    "case_from_json",
    "case_to_document",
    "case_to_json",
    "parse_json",
    "read_case_file",
    "size_key",
    "spread_key",
]

FORMAT = "lagscape-case"
"""The value of `format`, which tells a case file from any other JSON."""

LARGEST_FILE_BYTES = 65536
"""A case file is a few kilobytes; anything longer is not read."""

MOST_BRACKETS = 300
"""A case holds some forty objects and lists; more opening brackets than this are not read."""

_FIELDS = ("format", "version", "loop", "starting_case", "numbers", "choices", "levers", "disturbance")


def case_to_json(case: Case) -> str:
    """The case file's text, indented, ending in a newline; equal cases give equal text."""
    return json.dumps(case_to_document(case), indent=2, allow_nan=False) + "\n"


def case_from_json(text: str | bytes, check_lever: LeverCheck | None = None) -> Case:
    """The case that a case file's text holds, equal to the last bit to the one that was written.

    Parameters
    ----------
    text : str or bytes
        UTF-8 where bytes, with or without a byte order mark.
    check_lever : callable, optional
        Called with loop kind, lever name and dose of each lever; its InvalidInputError refuses the file.

    Raises
    ------
    CaseFormatError
        If the text is no case file of a known version, or breaks a rule; one sentence says which.
    """
    return case_from_document(parse_json(text), check_lever)


def read_case_file(path: str | Path, check_lever: LeverCheck | None = None) -> Case:
    """The case in a file; see `case_from_json`. OSError passes through."""
    with open(path, "rb") as file:
        return case_from_json(file.read(LARGEST_FILE_BYTES + 1), check_lever)


def parse_json(text: str | bytes) -> Any:
    """The JSON value of a text, read strictly: no NaN or Infinity, no key twice, no more than LARGEST_FILE_BYTES.

    Raises
    ------
    CaseFormatError
        Otherwise.
    """
    size = len(text)
    if size <= LARGEST_FILE_BYTES and isinstance(text, str):
        size = len(text.encode("utf-8", "surrogatepass"))
    if size > LARGEST_FILE_BYTES:
        raise CaseFormatError(f"The file is longer than the {LARGEST_FILE_BYTES} bytes that a case file may have; it is not a case file.")
    try:
        plain = text.decode("utf-8") if isinstance(text, bytes) else text
    except UnicodeDecodeError:
        raise CaseFormatError("The file is not UTF-8 text, so it is not a case file.") from None
    # Deep nesting overflows the browser's stack, which ends the runtime instead of raising RecursionError: refused before parsing.
    if plain.count("[") + plain.count("{") > MOST_BRACKETS:
        raise CaseFormatError("The case is not a case file: it holds far more objects and lists than a case has.")
    try:
        return json.loads(plain.removeprefix("\ufeff"), object_pairs_hook=_object, parse_constant=_refuse_constant, parse_int=_whole)
    except json.JSONDecodeError as error:
        raise CaseFormatError(f"The case is not JSON: {error.msg.lower()} at line {error.lineno}, column {error.colno}.") from None


def case_to_document(case: Case) -> dict[str, Any]:
    """The case as plain dicts, lists, strings and numbers, in the newest version's layout."""
    known = specifications(case.kind)
    numbers: dict[str, Any] = {}
    for name, number in case.numbers.items():
        entry: dict[str, Any] = {"value": number.value, "basis": str(number.basis)}
        if number.spread is not None:
            entry[spread_key(known[name].distribution)] = number.spread
        numbers[name] = entry
    return {
        "format": FORMAT,
        "version": NEWEST_VERSION,
        "loop": case.kind,
        "starting_case": case.started_from,
        "numbers": numbers,
        "choices": dict(case.choices),
        "levers": [{"name": lever.name, "dose": lever.dose} for lever in case.levers],
        "disturbance": _disturbance_document(case),
    }


def case_from_document(document: Any, check_lever: LeverCheck | None = None) -> Case:
    """The case in a document of any known version; see `case_from_json`."""
    if not isinstance(document, dict) or document.get("format") != FORMAT:
        raise CaseFormatError(f'This is not a case file: a case is a JSON object whose "format" is "{FORMAT}".')
    document = migrated(document)
    _keys("The case", document, required=_FIELDS)
    try:
        kind = document["loop"]
        known = specifications(kind)
        given = _mapping("numbers", document["numbers"])
        for name in given:
            if name not in known:
                raise CaseFormatError(f"The {kind} loop has no number {shown(name)}; it has: {', '.join(known)}.")
        numbers = {name: _number(name, entry, spread_key(known[name].distribution)) for name, entry in given.items()}
        case = Case(
            kind,
            numbers,
            _whole_mapping("choices", document["choices"], kind),
            tuple(_lever(item) for item in _list("levers", document["levers"])),
            _disturbance(document["disturbance"], kind),
            _text_or_none("starting_case", document["starting_case"]),
        )
        for lever in case.levers:
            if check_lever is not None:
                check_lever(kind, lever.name, lever.dose)
    except InvalidInputError as error:
        raise CaseFormatError(f"The case cannot be read: {error}") from error
    return case


def spread_key(distribution: str) -> str:
    """The key of a number's own spread: `spread_of_log` where it spreads by its logarithm."""
    return "spread_of_log" if distribution == "lognormal" else "spread"


def size_key(unit: str) -> str:
    """The key of a disturbance's size, with its unit: `size_l_min` for L/min."""
    return "_".join(["size", *unit.lower().replace("/", " ").split()])


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    result = dict(pairs)
    if len(result) < len(pairs):
        twice = next(key for index, (key, _) in enumerate(pairs) if key in {other for other, _ in pairs[:index]})
        raise CaseFormatError(f"The case holds the key {shown(twice)} twice; which one is meant is not said.")
    return result


def _refuse_constant(name: str) -> NoReturn:
    raise CaseFormatError(f"The case holds {name}, which is not a number of JSON; every number must be finite.")


def _whole(digits: str) -> int | float:
    # Long digit strings cost time without bound as integers, and no case needs one.
    return int(digits) if len(digits) <= 20 else float(digits)


def _keys(where: str, given: dict[str, Any], required: tuple[str, ...], optional: tuple[str, ...] = ()) -> None:
    for name in given:
        if name not in required and name not in optional:
            raise CaseFormatError(f"{where} holds the unknown key {shown(name)}; allowed are: {', '.join(required + optional)}.")
    for name in required:
        if name not in given:
            raise CaseFormatError(f"{where} lacks the key {name!r}.")


def _mapping(name: str, value: Any) -> dict[str, Any]:
    if not isinstance(value, dict):
        raise CaseFormatError(f"The {name} of a case must be a JSON object; got {shown(value)}.")
    return value


def _whole_mapping(name: str, value: Any, kind: str) -> dict[str, Any]:
    """The choices, none left to its default: a file says the whole case."""
    from lagscape.loops.register import LOOPS

    given = _mapping(name, value)
    for choice in LOOPS[kind].choices:
        if choice.name not in given:
            raise CaseFormatError(f"The {name} of the case lack {choice.name!r}.")
    return given


def _list(name: str, value: Any) -> list[Any]:
    if not isinstance(value, list):
        raise CaseFormatError(f"The {name} of a case must be a JSON array; got {shown(value)}.")
    return value


def _text_or_none(name: str, value: Any) -> str | None:
    if value is not None and not isinstance(value, str):
        raise CaseFormatError(f"The {name} of a case must be a text or null; got {shown(value)}.")
    return value


def _number(name: str, entry: Any, key: str) -> Number:
    if not isinstance(entry, dict):
        raise CaseFormatError(f"The number {shown(name)} must be an object with value and basis; got {shown(entry)}.")
    _keys(f"The number {shown(name)}", entry, ("value", "basis"), (key,))
    if key in entry and entry[key] is None:
        raise CaseFormatError(f"The {key} of {shown(name)} must be a number; leave the key out where there is none.")
    return Number(entry["value"], entry["basis"], entry.get(key))


def _lever(item: Any) -> LeverSetting:
    if not isinstance(item, dict):
        raise CaseFormatError(f"A lever must be an object with name and dose; got {shown(item)}.")
    _keys("A lever", item, ("name", "dose"))
    return LeverSetting(item["name"], item["dose"])


def _disturbance_document(case: Case) -> dict[str, Any] | None:
    setting = case.disturbance
    if setting is None:
        return None
    return {"name": setting.name, size_key(disturbance_units(case.kind)[setting.name]): setting.size}


def _disturbance(item: Any, kind: str) -> DisturbanceSetting | None:
    if item is None:
        return None
    if not isinstance(item, dict):
        raise CaseFormatError(f"The disturbance must be an object or null; got {shown(item)}.")
    units = disturbance_units(kind)
    name = item.get("name")
    if not isinstance(name, str) or name not in units:
        raise CaseFormatError(f"The disturbance must be one of {', '.join(units)}; got {shown(name)}.")
    key = size_key(units[name])
    _keys("The disturbance", item, ("name", key))
    return DisturbanceSetting(name, item[key])
