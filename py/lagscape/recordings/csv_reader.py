"""Text tables (CSV) into a recording: in blocks, with a note for everything that had to be repaired."""

import numpy as np

from lagscape.errors import RecordingError
from lagscape.recordings.csv_clock import unroll_midnights
from lagscape.recordings.csv_columns import Tally, columns_of
from lagscape.recordings.csv_layout import Layout, read_layout
from lagscape.recordings.csv_text import Source, open_source, text_blocks
from lagscape.recordings.kinds import guess_kind
from lagscape.recordings.recording import ArraySamples, Note, Progress, Recording, Signal, counted
from lagscape.recordings.stepwise import Steps, finished
from lagscape.recordings.time_base import TimeBase, even_time_base, time_base_of_rate

__all__ = ["csv_steps", "read_csv"]

_LOOKED_AT = 100_000

_TELL = {
    "missing": ("value", "{n} of '{name}' missing"),
    "unit": ("value", "{n} of '{name}' with text behind the number ('{example}'); the number was kept"),
    "text": ("value", "{n} of '{name}' left out: no number ('{example}')"),
    "few": ("line", "{n} with too few columns; what was there was kept"),
    "many": ("line", "{n} with too many columns; the surplus was left out"),
}


def read_csv(
    source: Source,
    *,
    name: str | None = None,
    sampling_frequency_hz: float | None = None,
    time_column: str | None = None,
    time_unit: str | None = None,
    progress: Progress | None = None,
) -> Recording:
    """Read a text table. See `lagscape.recordings.read_recording` for the arguments and what is raised."""
    steps = csv_steps(
        source, name=name, sampling_frequency_hz=sampling_frequency_hz, time_column=time_column, time_unit=time_unit
    )  # fmt: skip
    return finished(steps, progress)


def csv_steps(
    source: Source,
    *,
    name: str | None = None,
    sampling_frequency_hz: float | None = None,
    time_column: str | None = None,
    time_unit: str | None = None,
) -> Steps[Recording]:
    """`read_csv`, a block of about 1 MB a step; counts bytes."""
    if sampling_frequency_hz is not None and not 0.0 < sampling_frequency_hz <= 1e5:
        raise RecordingError(f"sampling_frequency_hz must be over 0 and at most 1e5 (Hz), got {sampling_frequency_hz!r}")
    with open_source(source) as (stream, total, source_name):
        layout: Layout | None = None
        tally = Tally()
        wanted: list[int] = []
        parts: list[_Column] = []
        read = 0
        for block, done in text_blocks(stream):
            read += len(block)
            if layout is None:
                layout = read_layout(block, time_column=time_column, time_unit=time_unit)
                block, tally.lines = _after_lines(block, layout.skipped_lines), layout.skipped_lines
                wanted = [i for i, role in enumerate(layout.roles) if role == "number" or i == layout.time_column]
                parts = [_Column(np.float64 if i == layout.time_column else np.float32) for i in wanted]
            for part, values in zip(parts, columns_of(block, layout, wanted, tally), strict=True):
                part.add(values, int(1.02 * (part.n + values.size) * max((total or 0) / read, 1.0)))
            yield done, total
    if layout is None:
        raise RecordingError("the file is empty")
    columns = {column: part.taken() for column, part in zip(wanted, parts, strict=True)}
    del parts
    return _assemble(columns, layout, tally, name or source_name, sampling_frequency_hz)


class _Column:
    """Values as they come, in one array sized by what the file's length promises: no second copy is ever held."""

    def __init__(self, dtype: type) -> None:
        self.values: np.ndarray = np.empty(0, dtype=dtype)
        self.n = 0

    def add(self, values: np.ndarray, expected: int) -> None:
        """Append; `expected` is how many values the whole file is likely to have."""
        needed = self.n + values.size
        if needed > self.values.size:
            grown = np.empty(max(needed, expected, int(1.25 * self.values.size)), dtype=self.values.dtype)
            grown[: self.n] = self.values[: self.n]
            self.values = grown
        with np.errstate(over="ignore"):
            self.values[self.n : needed] = values
        self.n = needed

    def taken(self) -> np.ndarray:
        return self.values[: self.n]


def _after_lines(block: bytes, n_lines: int) -> bytes:
    at = 0
    for _ in range(n_lines):
        at = block.index(b"\n", at) + 1
    return block[at:]


def _assemble(columns: dict[int, np.ndarray], layout: Layout, tally: Tally, name: str, rate: float | None) -> Recording:
    time_column = layout.time_column
    notes = [Note(text[0].upper() + text[1:]) for text in layout.guesses]
    times = columns.pop(time_column, None) if time_column is not None else None
    n_rows = next((values.size for values in (*columns.values(), times) if values is not None), 0)
    base, start_clock = _time_base(times, n_rows, layout, rate, notes)
    notes += _tally_notes(tally, layout)
    dropped = [layout.names[i] for i, role in enumerate(layout.roles) if role == "text"]
    if any(name for name in dropped):
        notes.append(Note("columns without numbers were left out: " + ", ".join(f"'{n}'" for n in dropped), len(dropped)))
    signals = []
    for column in sorted(columns):
        if column == layout.index_column and len(columns) > 1:
            continue
        values = _on_grid(columns.pop(column), base)
        label, unit = layout.names[column], layout.units[column]
        if np.isfinite(values).any():
            kind = guess_kind(label, unit)
            signals.append(
                Signal(label, unit, kind, base.sampling_frequency_hz, values.size, base.segments, base.first_samples, ArraySamples(values))
            )
        else:
            notes.append(Note(f"'{label}' holds no number and was left out"))
    if not signals:
        raise RecordingError("the file holds a time column but no column of numbers beside it")
    return Recording(name, tuple(signals), base.segments, (*notes, *base.notes), (), start_clock)


def _time_base(
    times: np.ndarray | None, n_rows: int, layout: Layout, rate: float | None, notes: list[Note]
) -> tuple[TimeBase, float | None]:
    if n_rows < 2:
        raise RecordingError(f"the file holds {n_rows} line of numbers; a recording needs more")
    clock = layout.time_column is not None and layout.roles[layout.time_column] == "clock"
    start_clock = None
    if times is not None and clock:
        times = unroll_midnights(times)
        known = times[np.isfinite(times)]
        start_clock = float(known[0] % 86400.0) if known.size else None
    if rate is not None:
        if times is not None:
            notes.append(Note(f"the sampling rate given ({rate:g} Hz) was used in place of the time column"))
        return time_base_of_rate(n_rows, rate), start_clock
    if times is not None:
        if not clock:
            unit_s = layout.time_unit_s or _guessed_unit(times[:_LOOKED_AT], notes)
            times = times if unit_s == 1.0 else times * unit_s
        return even_time_base(times), start_clock
    if layout.stated_rate_hz is not None:
        notes.append(Note(f"the sampling rate was taken from the lines above the numbers: {layout.stated_rate_hz:g} Hz"))
        return time_base_of_rate(n_rows, layout.stated_rate_hz), None
    raise RecordingError(
        "the file has no time column and states no sampling rate; give the rate in samples a second "
        "(sampling_frequency_hz=25, or --rate 25), or name the column that holds the time (time_column)"
    )


def _guessed_unit(times: np.ndarray, notes: list[Note]) -> float:
    """Seconds per unit of a time column that does not name its unit: seconds, unless the steps make no sense as such."""
    good = times[np.isfinite(times)]
    steps = np.diff(good)
    steps = steps[steps > 0]
    step = float(np.median(steps)) if steps.size else 1.0
    largest = float(np.abs(good).max()) if good.size else 0.0
    for unit, seconds, fits in (
        ("nanoseconds", 1e-9, largest > 1e17),
        ("microseconds", 1e-6, 1e14 < largest <= 1e17),
        ("milliseconds", 1e-3, 1e11 < largest <= 1e14 or (step >= 15.0 and largest <= 1e11)),
        ("days", 86400.0, 20000.0 < largest < 80000.0 and step < 2e-5),
    ):
        if fits:
            notes.append(Note(f"the time column does not name its unit; it was taken as {unit}"))
            return seconds
    return 1.0


def _tally_notes(tally: Tally, layout: Layout) -> list[Note]:
    notes = []
    for key, count in tally.counts.items():
        what, _, column = key.partition("|")
        if what == "missing" and layout.time_column is not None and column == layout.names[layout.time_column]:
            continue
        if what in _TELL:
            noun, words = _TELL[what]
            text = words.format(n=counted(count, noun), name=column, example=tally.example.get(key, "")[:40])
            notes.append(Note(text, count, tally.first_line[key]))
    return notes


def _on_grid(values: np.ndarray, base: TimeBase) -> np.ndarray:
    if base.kept is not None:
        values = values[base.kept]
    if base.resample_at is None or base.row_times is None:
        return values
    good = np.isfinite(values)
    if not good.any():
        return np.full(base.resample_at.size, np.nan, dtype=np.float32)
    laid = np.interp(base.resample_at, base.row_times[good], values[good])
    # A grid point next to a missing value has nothing to stand on.
    nearest = np.clip(np.searchsorted(base.row_times, base.resample_at), 0, base.row_times.size - 1)
    laid[~good[nearest]] = np.nan
    return laid.astype(np.float32)
