"""Clock times and ISO 8601 date-times as seconds.

Only dates of the form year-month-day are used; others are ambiguous (3/4 is March or April), so of those the time of day
alone is kept and a step back of more than half a day is taken for midnight.
"""

import datetime
import re

import numpy as np

from lagscape.recordings.decimals import decimals, gather

__all__ = ["clock_column", "clock_seconds", "unroll_midnights"]

_DAY_S = 86400.0
_CLOCK = re.compile(
    r"(?:(?P<year>\d{4})-(?P<month>\d\d?)-(?P<day>\d\d?)[T ]\s*|\d{1,4}[./-]\d{1,2}[./-]\d{1,4},?[T ]\s*)?"
    r"(?P<h>\d{1,2}):(?P<m>\d\d)(?::(?P<s>\d\d(?:[.,]\d*)?))?\s*(?P<half>[AaPp]\.?[Mm]\.?)?\s*(?:Z|UTC|[+-]\d\d:?\d\d)?"
)


def clock_seconds(text: str) -> float | None:
    """Seconds of a clock time (from midnight) or of a date-time (from day 1 of year 1); None where it is neither."""
    found = _CLOCK.fullmatch(text.strip().strip('"'))
    if found is None:
        return None
    hour, minute = int(found["h"]), int(found["m"])
    second = float((found["s"] or "0").replace(",", "."))
    if found["half"]:
        if not 1 <= hour <= 12:
            return None
        hour = hour % 12 + (12 if found["half"][0] in "pP" else 0)
    if hour > 24 or minute > 59 or second >= 61.0:
        return None
    day = 0
    if found["year"]:
        try:
            day = datetime.date(int(found["year"]), int(found["month"]), int(found["day"])).toordinal()
        except ValueError:
            return None
    return day * _DAY_S + hour * 3600.0 + minute * 60.0 + second


def clock_column(buffer: np.ndarray, starts: np.ndarray, lengths: np.ndarray) -> np.ndarray:
    """Seconds of many clock fields of a byte buffer, shape (n,); nan where a field is no clock time."""
    text = gather(buffer, starts, lengths)
    colon = text == ord(":")
    first = colon.argmax(axis=1)
    second = text.shape[1] - 1 - colon[:, ::-1].argmax(axis=1)
    blank = (text == ord(" ")) | (text == ord("T"))
    has_date = blank.any(axis=1) & (blank.argmax(axis=1) < first)
    hour_at = np.where(has_date, blank.argmax(axis=1) + 1, 0)
    hours, plain_h = decimals(buffer, starts + hour_at, first - hour_at)
    minutes, plain_m = decimals(buffer, starts + first + 1, second - first - 1)
    seconds, plain_s = decimals(buffer, starts + second + 1, lengths - second - 1)
    fine = (colon.sum(axis=1) == 2) & plain_h & plain_m & plain_s & (hours <= 24) & (minutes <= 59) & (seconds < 61)
    result = np.where(fine, hours * 3600.0 + minutes * 60.0 + seconds, np.nan)
    if (has_date & fine).any():
        fine &= _add_days(text, has_date, result)
    for i in np.flatnonzero(~fine):
        value = clock_seconds(bytes(text[i]).rstrip(b"\0").decode("latin-1"))
        result[i] = np.nan if value is None else value
    return result


def _add_days(text: np.ndarray, has_date: np.ndarray, result: np.ndarray) -> np.ndarray:
    """Add the days of ISO dates to `result`; False where the date is of another form."""
    width = min(10, text.shape[1])
    keys = np.ascontiguousarray(text[:, :width]).view(f"S{width}").ravel()
    fine = np.ones(len(result), dtype=bool)
    for key in np.unique(keys[has_date]):
        rows = has_date & (keys == key)
        if re.fullmatch(rb"\d{4}-\d\d-\d\d", key) is None or text.shape[1] <= 10:
            fine &= ~rows
            continue
        try:
            result[rows] += datetime.date.fromisoformat(key.decode()).toordinal() * _DAY_S
        except ValueError:
            fine &= ~rows
    return fine


def unroll_midnights(seconds: np.ndarray) -> np.ndarray:
    """Clock times made to run on: a step back of more than half a day is a midnight, not a mistake."""
    steps = np.diff(seconds, prepend=seconds[:1])
    return seconds + _DAY_S * np.cumsum(np.where(steps < -0.5 * _DAY_S, 1.0, 0.0))
