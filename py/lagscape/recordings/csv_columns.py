"""One block of table lines into columns of numbers, with a count of everything that was not as it should be."""

import re
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from lagscape.recordings.csv_clock import clock_column
from lagscape.recordings.csv_layout import Layout
from lagscape.recordings.decimals import decimals, gather

__all__ = ["Tally", "columns_of"]

_COMMENT = re.compile(rb"(?m)^[ \t]*(?:#|%|//)")
_NUMBER_AHEAD = re.compile(r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,3})?")
_UNIT_BEHIND = re.compile(r"\s*[A-Za-z%°µ/0-9²\s]{1,12}")
_MISSING = frozenset(("", "na", "n/a", "nan", "-", "--", "---", "null", "none", ".", "inf", "-inf", "+inf"))
_LONGEST_KEPT = 200


@dataclass
class Tally:
    """Counts by kind of damage, each with the line where it was first met. Filled as blocks go by."""

    lines: int = 0
    counts: dict[str, int] = field(default_factory=dict)
    first_line: dict[str, int] = field(default_factory=dict)
    example: dict[str, str] = field(default_factory=dict)

    def add(self, what: str, count: int, line: int, example: str = "") -> None:
        if count:
            self.counts[what] = self.counts.get(what, 0) + count
            self.first_line.setdefault(what, line)
            if example:
                self.example.setdefault(what, example)


def columns_of(block: bytes, layout: Layout, wanted: list[int], tally: Tally) -> list[np.ndarray]:
    """The wanted columns of a block of whole lines as float64 arrays of equal length, nan where a value is missing.

    Lines that are blank or comments are left out. A line with too few fields gives nan for those it lacks.
    """
    line_numbers: np.ndarray | None = None
    first_line = tally.lines + 1
    tally.lines += block.count(b"\n")
    if _COMMENT.search(block) or b"\n\n" in block or block.startswith(b"\n") or layout.separator == " ":
        block, line_numbers = _without_comments(block, layout.separator == " ")
        tally.add("comment", int(line_numbers[-1] + 1 - line_numbers.size) if line_numbers.size else 0, first_line)
    if not block:
        return [np.empty(0) for _ in wanted]
    separator = ord(layout.separator)
    buffer = np.frombuffer(block, dtype=np.uint8)
    if b'"' in block:
        buffer = _unquoted(buffer, separator, layout.decimal_comma)
    if layout.decimal_comma and separator != ord(","):
        buffer = np.where(buffer == ord(","), np.uint8(ord(".")), buffer)
    ends = np.flatnonzero(buffer == ord("\n"))
    begins = np.concatenate(([0], ends[:-1] + 1))
    cuts = np.flatnonzero(buffer == separator)
    before_end = np.searchsorted(cuts, ends)
    n_cuts = np.diff(before_end, prepend=0)
    first_cut = before_end - n_cuts

    def line_of(row: int) -> int:
        return first_line + (int(line_numbers[row]) if line_numbers is not None else row)

    few = n_cuts < layout.n_columns - 1
    many = n_cuts > layout.n_columns - 1
    for what, rows in (("few", few), ("many", many)):
        if rows.any():
            tally.add(what, int(rows.sum()), line_of(int(rows.argmax())))
    padded = np.concatenate((cuts, [buffer.size]))
    result = []
    for column in wanted:
        start = begins if column == 0 else padded[np.minimum(first_cut + column - 1, cuts.size)] + 1
        stop = np.where(n_cuts > column, padded[np.minimum(first_cut + column, cuts.size)], ends)
        lacking = n_cuts < column
        start = np.where(lacking, ends, start)
        stop = np.where(lacking, ends, stop)
        if layout.roles[column] == "clock":
            values = clock_column(buffer, start, stop - start)
        else:
            values = _numbers(buffer, start, stop - start, layout.names[column], line_of, tally)
        result.append(values)
    return result


def _without_comments(block: bytes, join_blanks: bool) -> tuple[bytes, np.ndarray]:
    kept, numbers = [], []
    for number, line in enumerate(block.split(b"\n")[:-1]):
        stripped = line.strip()
        if stripped and not stripped.startswith((b"#", b"%", b"//")):
            kept.append(b" ".join(stripped.split()) if join_blanks else line)
            numbers.append(number)
    text = b"\n".join(kept) + b"\n" if kept else b""
    return text, np.array(numbers, dtype=np.int64)


def _unquoted(buffer: np.ndarray, separator: int, decimal_comma: bool) -> np.ndarray:
    """Drop quotes; separators inside them become a decimal point (decimal comma) or a blank.

    Quotes are paired within one line, so that a stray one spoils its own line only.
    """
    quote = buffer == ord('"')
    so_far = np.cumsum(quote)
    newline = buffer == ord("\n")
    line = np.cumsum(newline) - newline
    at_start = np.concatenate(([0], so_far[newline]))[line]
    inside = (so_far - at_start) % 2 == 1
    odd = np.diff(np.concatenate(([0], so_far[newline]))) % 2 == 1
    inside &= ~np.concatenate((odd, [False]))[line]
    filler = ord(".") if decimal_comma and separator == ord(",") else ord("_")
    result = np.where(inside & (buffer == separator), np.uint8(filler), buffer)
    return result[~quote]


def _numbers(
    buffer: np.ndarray, starts: np.ndarray, lengths: np.ndarray, name: str, line_of: Callable[[int], int], tally: Tally
) -> np.ndarray:
    values, plain = decimals(buffer, starts, lengths)
    rest = np.flatnonzero(~plain)
    if not rest.size:
        return values
    text = gather(buffer, starts[rest], lengths[rest])
    # Many equal or exponent-form fields: one conversion for each distinct text.
    keys = np.ascontiguousarray(text).view(f"S{text.shape[1]}").ravel()
    distinct, first_at, inverse, counts = np.unique(keys, return_index=True, return_inverse=True, return_counts=True)
    meanings = np.empty(distinct.size)
    for i, key in enumerate(distinct):
        raw = key.decode("utf-8", errors="replace").strip()
        value, what = _meaning(raw)
        meanings[i] = value
        if what:
            tally.add(f"{what}|{name}", int(counts[i]), line_of(int(rest[first_at[i]])), raw)
            earliest = tally.first_line[f"{what}|{name}"]
            tally.first_line[f"{what}|{name}"] = min(earliest, line_of(int(rest[first_at[i]])))
    values[rest] = meanings[inverse]
    return values


def _meaning(text: str) -> tuple[float, str]:
    """A field's number, and the kind of damage: '' none, 'missing', 'unit' text behind a number, 'text' no number."""
    if text.casefold() in _MISSING:
        return np.nan, "missing"
    found = _NUMBER_AHEAD.match(text.replace("−", "-")[:_LONGEST_KEPT])
    if found:
        value = float(found[0])
        if not np.isfinite(value):
            return np.nan, "text"
        if found.end() == len(text):
            return value, ""
        if _UNIT_BEHIND.fullmatch(text[found.end() :]) and not text[found.end() : found.end() + 1].isdigit():
            return value, "unit"
    return np.nan, "text"
