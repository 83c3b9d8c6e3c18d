"""How a text table is laid out: separator, decimal mark, lines before the numbers, names, units, and which column is time.

Judged from its first lines alone, the way a person looks at it.
"""

import csv
import itertools
import re
from collections import Counter
from dataclasses import dataclass

from lagscape.errors import RecordingError
from lagscape.recordings.csv_clock import clock_seconds
from lagscape.recordings.recording import one_line, unique_names

__all__ = ["Layout", "is_number", "read_layout"]

_LINES_LOOKED_AT = 400
_SEPARATORS = ("\t", ";", ",", "|", " ")
_NUMBER = re.compile(r"[+-]?(\d+([.,]\d*)?|[.,]\d+)([eE][+-]?\d+)?")
_MISSING = frozenset(("", "na", "n/a", "nan", "-", "--", "---", "null", "none", ".", "inf", "-inf", "+inf"))
_NAME_WITH_UNIT = re.compile(r"^(.*?)\s*[\[(]\s*([^\])]*?)\s*[\])]\s*$")
_UNIT_SUFFIX = re.compile(
    r"^(.*?)_(s|ms|us|min|h|hz|mmhg|kpa|percent|ml|l|l_min|l_per_min|l_per_s|ml_per_s|cmh2o|pa|g|mg|mv|uv|v|m_per_s2)$", re.I
)
_SPELT_UNITS = {"l_min": "L/min", "l_per_min": "L/min", "l_per_s": "L/s", "ml_per_s": "mL/s", "percent": "%", "m_per_s2": "m/s2", "l": "L",
                "ml": "mL"}
_TIME_NAME = re.compile(r"\s*(rel(ative)?\.?|elapsed|rec(ording)?)?[ _]*(t|time|times|timestamp|time ?stamp|clock|zeit|uhrzeit|temps|tiempo|"
                        r"tempo|tijd|seconds?|secs?|sekunden|s|ms|datetime|date ?time)\s*\.?", re.I)
_INDEX_NAME = re.compile(r"\s*(sample|index|idx|n|nr|no|#|row|i|sample ?(number|no|nr|index))\s*\.?", re.I)
_RATE = re.compile(r"(?:sampl\w*|\brate|frequen\w*|\bfs\b|abtast\w*)[^0-9\n]{0,40}?(\d+(?:[.,]\d+)?)\s*(k?hz|/s|1/s|per second)?", re.I)
_TIME_UNITS = {"s": 1.0, "sec": 1.0, "secs": 1.0, "second": 1.0, "seconds": 1.0, "sekunden": 1.0, "ms": 1e-3, "msec": 1e-3,
               "milliseconds": 1e-3, "us": 1e-6, "µs": 1e-6, "ns": 1e-9, "min": 60.0, "minutes": 60.0, "h": 3600.0, "hours": 3600.0}


@dataclass(frozen=True)
class Layout:
    """`roles` holds one of number, clock, text for each column; `time_column` is None where no column is time.

    `time_unit_s` is s per unit of a numeric time column, None where the file does not say.
    """

    separator: str
    decimal_comma: bool
    skipped_lines: int
    names: tuple[str, ...]
    units: tuple[str, ...]
    roles: tuple[str, ...]
    time_column: int | None
    time_unit_s: float | None
    index_column: int | None
    stated_rate_hz: float | None
    guesses: tuple[str, ...]

    @property
    def n_columns(self) -> int:
        return len(self.names)


def is_number(text: str) -> bool:
    """Whether a field reads as a number with a point or a comma for decimals."""
    return _NUMBER.fullmatch(text.strip()) is not None


def read_layout(head: bytes, *, time_column: str | None = None, time_unit: str | None = None) -> Layout:
    """Judge a table from its first block of whole lines.

    Raises
    ------
    RecordingError
        If no run of lines with numbers is found, or the named time column or unit is not there.
    """
    lines = _decode(head).split("\n")[:_LINES_LOOKED_AT]
    separator, first, n_columns = _find_table(lines)
    first = _damaged_start(lines, first, separator, n_columns)
    data = [fields for fields in (_split(line, separator) for line in lines[first:] if _is_data(line)) if len(fields) == n_columns]
    guesses: list[str] = []
    decimal_comma = _uses_decimal_comma(data, separator)
    header, units_row, before = _header_above(lines, first, separator, n_columns)
    if separator == "," and n_columns == 2 and len(header) == 1 and all(row[1].isdigit() for row in data):
        # A lone comma between two numbers under one name is a decimal comma.
        separator, n_columns, decimal_comma = ";", 1, True
        data = [[f"{row[0]},{row[1]}"] for row in data]
    if separator == "," and not decimal_comma and header and len(header) * 2 == n_columns:
        raise RecordingError(
            f"{len(header)} names stand over {n_columns} numbers a line: it seems that the comma both separates the columns and "
            "marks the decimals; export the file again with semicolons or tabs, or with decimal points"
        )
    if len(header) == n_columns - 1 and any(row[-1] for row in data):
        header = ["", *header]
    names, units = _names_and_units(header, units_row, n_columns)
    roles = [_role([fields[i] for fields in data]) for i in range(n_columns)]
    if "number" not in roles:
        raise RecordingError("the file holds no column of numbers")
    index_column = next((i for i, name in enumerate(names) if header and _INDEX_NAME.fullmatch(name) and roles[i] == "number"), None)
    where = _find_time(names, units, roles, data, bool(header), time_column, index_column, guesses)
    unit_s = _time_unit(where, names, units, time_unit)
    rate = _stated_rate(before)
    return Layout(
        separator, decimal_comma, first, tuple(unique_names(names)), tuple(units), tuple(roles), where, unit_s, index_column, rate,
        tuple(guesses),
    )  # fmt: skip


def _decode(head: bytes) -> str:
    try:
        return head.decode()
    except UnicodeDecodeError:
        return head.decode("cp1252", errors="replace")


def _is_data(line: str) -> bool:
    stripped = line.strip()
    return bool(stripped) and not stripped.startswith(("#", "%", "//"))


def _split(line: str, separator: str) -> list[str]:
    if separator == " ":
        return line.split()
    if '"' in line:
        return [field.strip() for field in next(csv.reader([line], delimiter=separator), [])]
    return [field.strip() for field in line.split(separator)]


def _find_table(lines: list[str]) -> tuple[str, int, int]:
    """Separator, index of the first line of numbers, number of columns: the reading that explains most lines."""
    best: tuple[float, str, int, int] | None = None
    for separator in _SEPARATORS:
        shapes = []
        for index, line in enumerate(lines):
            if _is_data(line):
                fields = _split(line, separator)
                if any(is_number(field) or clock_seconds(field) is not None for field in fields):
                    filled = sum(_is_value(field) for field in fields)
                    shapes.append((index, len(fields), filled >= 0.5 * len(fields)))
        counts = Counter(n for _, n, good in shapes if good)
        if not counts:
            continue
        n_columns, n_lines = max(counts.items(), key=lambda item: (item[1], item[0]))
        # More columns are more telling, but only if nearly as many lines agree on them.
        score = n_lines * (1.0 if n_columns == 1 else 1.5)
        if best is None or score > best[0] * 1.0001:
            first = next(index for index, n, good in shapes if n == n_columns and good)
            best = (score, separator, first, n_columns)
    if best is None:
        seen = next((line.strip() for line in lines if line.strip()), "")
        raise RecordingError(f"no line of numbers was found; the file starts with '{one_line(seen)}'")
    return best[1], best[2], best[3]


def _damaged_start(lines: list[str], first: int, separator: str, n_columns: int) -> int:
    """The first line of numbers, allowing for damaged ones between the names and the first sound one."""

    def fields_of(index: int) -> list[str]:
        return _split(lines[index], separator)

    def holds_a_number(index: int) -> bool:
        return any(is_number(field) or clock_seconds(field) is not None for field in fields_of(index))

    at = first
    while at > 0 and len(fields_of(at - 1)) == n_columns and holds_a_number(at - 1):
        at -= 1
    named = at > 0 and len(fields_of(at - 1)) == n_columns and not holds_a_number(at - 1)
    return at if named else first


def _is_value(field: str) -> bool:
    return is_number(field) or field.casefold() in _MISSING or clock_seconds(field) is not None


def _uses_decimal_comma(data: list[list[str]], separator: str) -> bool:
    fields = [field for row in data for field in row if is_number(field)]
    commas = sum("," in field for field in fields)
    points = sum("." in field for field in fields)
    return commas > points


def _header_above(lines: list[str], first: int, separator: str, n_columns: int) -> tuple[list[str], list[str], list[str]]:
    """Names, units and the lines above them. A comment mark before the names does not hide them."""
    above = [(i, line.strip().lstrip("#%").strip()) for i, line in enumerate(lines[:first]) if line.strip().lstrip("#%").strip()]
    before = [line for _, line in above]
    if not above:
        return [], [], before
    candidates = []
    for _, line in reversed(above[-2:]):
        fields = _split(line, separator)
        if separator == " " and len(fields) != n_columns:
            fields = re.split(r"\s{2,}|\t", line)
        candidates.append(fields)
    fits = [len(fields) in (n_columns, n_columns - 1) and not any(is_number(f) for f in fields) for fields in candidates]
    if len(candidates) == 2 and all(fits) and len(candidates[0]) == len(candidates[1]) and _looks_like_units(candidates[0]):
        return candidates[1], candidates[0], before[:-2]
    if fits[0] or (n_columns == 2 * len(candidates[0]) and not any(is_number(f) for f in candidates[0])):
        return candidates[0], [], before[:-1]
    if len(candidates[0]) == n_columns:
        # Names such as "1" and "2" are names where a line of plain text would not have as many fields.
        return candidates[0], [], before[:-1]
    return [], [], before


def _looks_like_units(fields: list[str]) -> bool:
    return all(len(field) <= 8 for field in fields) and any(
        re.fullmatch(r"[\[(]?(s|ms|min|sec|l/min|l/s|ml|l|%|mmhg|kpa|mv|uv|µv|v|a\.?u\.?|g|hz|cmh2o|hh:mm:ss.*)[\])]?", field.strip(), re.I)
        for field in fields
    )


def _names_and_units(header: list[str], units_row: list[str], n_columns: int) -> tuple[list[str], list[str]]:
    names = [name.strip().strip('"') for name in header][:n_columns]
    units = [unit.strip().strip("[]()") for unit in units_row][:n_columns]
    names += [""] * (n_columns - len(names))
    units += [""] * (n_columns - len(units))
    for i, name in enumerate(names):
        if units[i]:
            continue
        bracketed = _NAME_WITH_UNIT.match(name)
        suffixed = _UNIT_SUFFIX.match(name)
        if bracketed and bracketed[1]:
            names[i], units[i] = bracketed[1], one_line(bracketed[2], 20)
        elif suffixed:
            # The name stays as written, so that what a person types to find it is what stands in the file.
            units[i] = _SPELT_UNITS.get(suffixed[2].casefold(), suffixed[2])
    return names, units


def _role(column: list[str]) -> str:
    filled = [field for field in column if field.casefold() not in _MISSING]
    if not filled:
        return "text" if column else "number"
    numbers = sum(is_number(field) for field in filled)
    clocks = sum(clock_seconds(field) is not None for field in filled)
    carrying = sum(re.match(r"[+-]?[\d.,]", field) is not None for field in filled)
    if clocks > 0.5 * len(filled):
        return "clock"
    return "number" if numbers >= 0.3 * len(filled) or (carrying > 0.9 * len(filled) and numbers > 0) else "text"


def _find_time(
    names: list[str], units: list[str], roles: list[str], data: list[list[str]], named: bool, wanted: str | None,
    index_column: int | None, guesses: list[str],
) -> int | None:  # fmt: skip
    if wanted is not None:
        for i, name in enumerate(names):
            if name.casefold() == wanted.strip().casefold() and roles[i] != "text":
                return i
        raise RecordingError(f"no time column '{wanted}'; the file has: " + ", ".join(f"'{name}'" for name in names))
    for i, name in enumerate(names):
        bare = _UNIT_SUFFIX.match(name)
        if roles[i] != "text" and _TIME_NAME.fullmatch(bare[1] if bare else name):
            # A clock column next to a date column is the finer of the two.
            later = next((j for j in range(len(names)) if roles[j] == "clock"), i) if roles[i] != "clock" else i
            return later if roles[i] != "number" or _rises(data, i) else None
    clock = next((i for i, role in enumerate(roles) if role == "clock"), None)
    if clock is not None:
        return clock
    if len(names) > 1 and roles[0] == "number" and index_column != 0 and _rises(data, 0, evenly=True) and (not named or not names[0]):
        guesses.append("the first column rises evenly and was taken as time")
        return 0
    return None


def _rises(data: list[list[str]], column: int, evenly: bool = False) -> bool:
    values = [float(row[column].replace(",", ".")) for row in data if is_number(row[column])]
    steps = [b - a for a, b in itertools.pairwise(values)]
    if len(steps) < 2:
        return not evenly
    forward = sum(step >= 0 for step in steps)
    if not evenly:
        return forward > 0.5 * len(steps)
    middle = sorted(steps)[len(steps) // 2]
    near = sum(abs(step - middle) <= 0.25 * middle for step in steps)
    return middle > 0 and near >= 0.8 * len(steps)


def _time_unit(where: int | None, names: list[str], units: list[str], stated: str | None) -> float | None:
    if stated is not None:
        if stated.casefold() not in _TIME_UNITS:
            raise RecordingError(f"time unit must be one of s, ms, us, min, h, got '{stated}'")
        return _TIME_UNITS[stated.casefold()]
    if where is None:
        return None
    return _TIME_UNITS.get(units[where].strip().casefold()) or _TIME_UNITS.get(names[where].strip().casefold())


def _stated_rate(before: list[str]) -> float | None:
    for line in before:
        found = _RATE.search(line)
        if found:
            value = float(found[1].replace(",", ".")) * (1000.0 if (found[2] or "").casefold() == "khz" else 1.0)
            if 0.01 <= value <= 1e5:
                return value
    return None
