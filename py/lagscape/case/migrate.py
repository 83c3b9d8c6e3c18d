"""Case files of older versions, brought to the newest one step at a time.

| version | layout |
|---|---|
| 0 | The short form, for scripts and hand-typed files: `numbers` holds bare values, and what is left out is typical (or the |
|   | starting case's). There is no basis: a value that equals the typical one is typical, any other assumed. |
| 1 | Every number with its value, basis and, where it has its own, its spread; settings, levers, disturbance, starting case. |

A new version adds one function here, keyed by the version that it starts from. It gets a document whose `version` is right and
whose other fields are whatever the file held, and raises CaseFormatError where it cannot make sense of one.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from lagscape.case.case import Case, specifications
from lagscape.case.parameters import Basis
from lagscape.errors import CaseFormatError, InvalidInputError

__all__ = ["MIGRATIONS", "NEWEST_VERSION", "OLDEST_VERSION", "Migration", "migrated"]

NEWEST_VERSION = 1

Migration = Callable[[dict[str, Any]], dict[str, Any]]


def migrated(document: dict[str, Any], migrations: Mapping[int, Migration] | None = None, newest: int = NEWEST_VERSION) -> dict[str, Any]:
    """The document in the newest version's layout.

    Parameters
    ----------
    document : dict
        A case document with a `version`.
    migrations : mapping from version to function, optional
        From each older version to the next; MIGRATIONS if None.
    newest : int
        The version to reach.

    Raises
    ------
    CaseFormatError
        If the version is missing, no whole number, newer than `newest` or older than the first.
    """
    migrations = MIGRATIONS if migrations is None else migrations
    version = document.get("version")
    if isinstance(version, float) and version.is_integer():
        version = int(version)
    if isinstance(version, bool) or not isinstance(version, int):
        raise CaseFormatError("The case has no version, so it cannot be read; save it again from Lagscape.")
    if version > newest:
        raise CaseFormatError(
            f"The case has version {version}, and this Lagscape reads up to version {newest}; open it in a newer Lagscape."
        )
    while version < newest:
        if version not in migrations:
            raise CaseFormatError(f"The case has version {version}, which was never a version of a case; save it again from Lagscape.")
        document = {**migrations[version]({**document, "version": version}), "version": version + 1}
        version += 1
    return {**document, "version": version}


def _from_short_form(document: dict[str, Any]) -> dict[str, Any]:
    """Version 0 to 1: the base case's numbers, the given values laid on them, each with a basis."""
    numbers = document.get("numbers", {})
    if not isinstance(numbers, dict):
        raise CaseFormatError("The numbers of a case must be an object from name to value; see the case's JSON Schema.")
    try:
        started_from = document.get("starting_case")
        base = Case.typical(document.get("loop", "")) if started_from is None else Case.from_starting_case(started_from)
    except InvalidInputError as error:
        raise CaseFormatError(f"The case cannot be read: {error}") from error
    if document.get("loop", base.kind) != base.kind:
        raise CaseFormatError(f"The case cannot be read: the starting case {started_from} is of the {base.kind} loop.")
    entries: dict[str, Any] = {name: {"value": number.value, "basis": str(number.basis)} for name, number in base.numbers.items()}
    known = specifications(base.kind)
    for name, value in numbers.items():
        typical = name in known and value == known[name].typical
        entries[name] = {"value": value, "basis": str(Basis.TYPICAL if typical else Basis.ASSUMED)}
    choices = document.get("choices", {})
    return {
        "disturbance": _disturbance_document(base),
        **document,
        "loop": document.get("loop", base.kind),
        "starting_case": started_from,
        "numbers": entries,
        "choices": {**base.choices, **choices} if isinstance(choices, dict) else choices,
        "levers": document.get("levers", []),
    }


def _disturbance_document(case: Case) -> Any:
    from lagscape.case.case_file import case_to_document

    return case_to_document(case)["disturbance"]


MIGRATIONS: Mapping[int, Migration] = {0: _from_short_form}

OLDEST_VERSION = min(MIGRATIONS)
