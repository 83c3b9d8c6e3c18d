"""Many cases in a table: one row in, one row out.

The table is CSV with a header; comma, semicolon or tab between columns. Every column is one of

    loop             breathing, reflex or plain; breathing where the column is missing or the cell empty
    starting_case    the name of a starting case; it brings its loop and the numbers that the row leaves out
    a number         by its name, which carries its unit (`resting_paco2_mmhg`); an empty cell takes the base's value
    a choice         by its name (`drive_shape`)

Any other column is refused, so a name or a patient number has no way in: rows are known by their place, `row` 1 being the first
under the header. A decimal comma is read where the columns are not separated by commas.
"""

from __future__ import annotations

import csv
from collections.abc import Callable, Iterable, Iterator, Mapping
from typing import Any, TextIO

from lagscape.case.case import Case, specifications
from lagscape.errors import CaseFormatError, InvalidInputError
from lagscape.loops.register import LOOPS

__all__ = ["CohortRow", "analysed_rows", "flat", "read_cohort", "write_cohort"]

CohortRow = dict[str, Any]

_LONGEST_LINE = 1_000_000
_BASE_COLUMNS = ("loop", "starting_case")


def read_cohort(lines: Iterable[str]) -> Iterator[Case | InvalidInputError]:
    """The case of each row, or the error that refuses it, in order; blank lines are no rows.

    Raises
    ------
    CaseFormatError
        If there is no header, or it has a column twice or one that is not known.
    """
    source = iter(lines)
    first = next((line for line in source if line.strip()), "")
    header_line = first.removeprefix("\ufeff")
    delimiter = max(",;\t", key=header_line.count)
    names = [name.strip() for name in _cells(header_line, delimiter)]
    _check_header(names)
    for line in source:
        if line.strip():
            yield _row_case(names, _cells(line, delimiter), delimiter != ",")


def analysed_rows(rows: Iterable[Case | InvalidInputError], analyse: Callable[[Case], Mapping[str, Any]]) -> Iterator[CohortRow]:
    """One flat result a row: `row` (from 1), the figures, and `error` (a sentence, or empty).

    `analyse` gives a case's figures as a plain mapping; its InvalidInputError becomes the row's error. The figure `kind` is left out:
    it is the column `loop`.
    """
    for index, case in enumerate(rows, start=1):
        if isinstance(case, InvalidInputError):
            yield {"row": index, "error": str(case)}
            continue
        try:
            figures = {name: value for name, value in flat(analyse(case)).items() if name != "kind"}
        except InvalidInputError as error:
            yield {"row": index, "loop": case.kind, "error": str(error)}
        else:
            yield {"row": index, "loop": case.kind, **figures, "error": ""}


def write_cohort(rows: Iterable[CohortRow], out: TextIO) -> tuple[int, int]:
    """Write the rows as CSV with every figure's column, all digits; the count of rows and of failed ones."""
    kept = list(rows)
    columns = list(dict.fromkeys(name for row in kept for name in row if name not in ("row", "error")))
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["row", *columns, "error"])
    for row in kept:
        writer.writerow([_cell(row.get(name)) for name in ("row", *columns, "error")])
    return len(kept), sum(bool(row["error"]) for row in kept)


def flat(figures: Mapping[str, Any], prefix: str = "") -> dict[str, Any]:
    """Nested mappings and sequences as one level: `equilibrium` with `paco2_mmhg` becomes `equilibrium_paco2_mmhg`."""
    result: dict[str, Any] = {}
    for name, value in figures.items():
        if isinstance(value, Mapping):
            result |= flat(value, f"{prefix}{name}_")
        elif isinstance(value, (list, tuple)):
            result |= flat({str(index): item for index, item in enumerate(value, start=1)}, f"{prefix}{name}_")
        else:
            result[prefix + name] = value
    return result


def _check_header(names: list[str]) -> None:
    if names in ([], [""]):
        raise CaseFormatError("The cohort has no header; its first line must name the columns, such as loop,resting_paco2_mmhg.")
    known = {name for kind in LOOPS for name in (*specifications(kind), *(item.name for item in LOOPS[kind].choices))}
    known |= set(_BASE_COLUMNS)
    for name in names:
        if name not in known:
            shown = repr(name if len(name) <= 40 else name[:37] + "...")
            raise CaseFormatError(
                f"The cohort has the unknown column {shown}; columns are loop, starting_case, and numbers and choices by name, "
                "and a column that could tell who someone is must be taken out."
            )
        if names.count(name) > 1:
            raise CaseFormatError(f"The cohort has the column {name} twice.")


def _cells(line: str, delimiter: str) -> list[str]:
    if len(line) > _LONGEST_LINE:
        raise CaseFormatError(f"The cohort has a line longer than {_LONGEST_LINE} characters; it is not a table of cases.")
    # Quotes are honoured within a line; a cell never spans lines, since every cell is a word or a number.
    try:
        return next(csv.reader([line.rstrip("\r\n")], delimiter=delimiter), [])
    except csv.Error:
        raise CaseFormatError("The cohort has a line that is not CSV.") from None


def _row_case(names: list[str], cells: list[str], decimal_comma: bool) -> Case | InvalidInputError:
    if len(cells) > len(names) and any(cell.strip() for cell in cells[len(names) :]):
        return InvalidInputError(f"The row has {len(cells)} cells under {len(names)} columns.")
    given = {name: cell.strip() for name, cell in zip(names, cells, strict=False) if cell.strip()}
    try:
        start = given.pop("starting_case", None)
        kind = given.pop("loop", None)
        case = Case.typical(kind or "breathing") if start is None else Case.from_starting_case(start)
        if kind is not None and kind != case.kind:
            raise InvalidInputError(f"The starting case {start} is of the {case.kind} loop, not {kind}.")
        choices = {item.name for item in LOOPS[case.kind].choices}
        for name, cell in given.items():
            case = case.with_choice(name, cell) if name in choices else case.with_number(name, _number(cell, decimal_comma))
    except InvalidInputError as error:
        return error
    return case


def _number(cell: str, decimal_comma: bool) -> Any:
    try:
        return float(cell.replace(",", ".") if decimal_comma else cell)
    except ValueError:
        return cell if len(cell) <= 40 else cell[:37] + "..."


def _cell(value: Any) -> str:
    if value is None:
        return ""
    return repr(value) if isinstance(value, float) else str(value)
