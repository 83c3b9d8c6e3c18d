"""A recording: named signals on one time base, the stretches it consists of, and what had to be repaired to read it.

Times are in s from the start of the recording. A signal holds its samples behind a small reader, so that a night of
several hundred megabytes can be opened without being in memory; `Signal.pieces` hands out only what is asked for.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from typing import Protocol

import numpy as np

from lagscape.errors import RecordingError

__all__ = [
    "Annotation",
    "ArraySamples",
    "Note",
    "Progress",
    "ReadCancelled",
    "Recording",
    "SampleStore",
    "Segment",
    "Signal",
    "counted",
    "one_line",
    "report_progress",
    "unique_names",
]


class ReadCancelled(RecordingError):
    """The progress callback asked to stop."""


class Progress(Protocol):
    """Called with bytes done and bytes in all (None where unknown); returning False cancels the work."""

    def __call__(self, done: int, total: int | None, /) -> bool | None: ...


def report_progress(progress: Progress | None, done: int, total: int | None) -> None:
    """Tell the callback; raise ReadCancelled where it answers False."""
    if progress is not None and progress(done, total) is False:
        raise ReadCancelled(f"reading was cancelled after {done} bytes")


class SampleStore(Protocol):
    """Where a signal's samples are: memory, or a file that is read by slices."""

    def read(self, first: int, stop: int) -> np.ndarray:
        """Samples first to stop - 1 as float64, shape (stop - first,); nan where the recording holds none."""
        ...


@dataclass(frozen=True, eq=False)
class ArraySamples:
    """Samples in memory. Kept in single precision: 24 bits, more than any physiological converter has."""

    values: np.ndarray

    def read(self, first: int, stop: int) -> np.ndarray:
        return self.values[first:stop].astype(np.float64)


@dataclass(frozen=True)
class Note:
    """One thing that was repaired, left out or guessed, in words fit for the screen and the report."""

    text: str
    count: int = 1
    first_line: int | None = None
    first_time_s: float | None = None

    def __str__(self) -> str:
        if self.first_line is not None:
            return f"{self.text} (first in line {self.first_line})"
        if self.first_time_s is not None:
            return f"{self.text} (first at {self.first_time_s:.1f} s)"
        return self.text


@dataclass(frozen=True)
class Annotation:
    """A mark in the recording: onset and duration in s (duration None where none was given), and its text."""

    onset_s: float
    duration_s: float | None
    text: str


@dataclass(frozen=True)
class Segment:
    """A stretch recorded without a break: start and stop in s."""

    start_s: float
    stop_s: float

    @property
    def duration_s(self) -> float:
        return self.stop_s - self.start_s


@dataclass(frozen=True, eq=False)
class Signal:
    """One channel. `kind` is a guess: ventilation, airflow, effort, SpO2, CO2, acceleration or unknown.

    `segments` are the recording's; `first_samples[i]` is the index of the first sample of segment i.
    """

    name: str
    unit: str
    kind: str
    sampling_frequency_hz: float
    n_samples: int
    segments: tuple[Segment, ...]
    first_samples: tuple[int, ...]
    samples: SampleStore = field(repr=False)

    def sample_range(self, segment: int) -> tuple[int, int]:
        """First sample of a segment and the one after its last."""
        first = self.first_samples[segment]
        stop = self.first_samples[segment + 1] if segment + 1 < len(self.first_samples) else self.n_samples
        return first, stop

    def pieces(
        self, start_s: float | None = None, stop_s: float | None = None, *, most: int | None = None
    ) -> Iterator[tuple[float, np.ndarray]]:
        """The samples inside the window, one (time of first sample in s, values) for each unbroken stretch.

        A sample at time t belongs to the window when start_s <= t < stop_s. With `most`, a stretch comes in parts of at
        most that many samples.
        """
        rate = self.sampling_frequency_hz
        for i, segment in enumerate(self.segments):
            first, stop = self.sample_range(i)
            length = stop - first
            # A hair of slack, so that a window on a sample's own time holds it in spite of rounding.
            low = 0 if start_s is None else int(np.clip(np.ceil((start_s - segment.start_s) * rate - 1e-6), 0, length))
            high = length if stop_s is None else int(np.clip(np.ceil((stop_s - segment.start_s) * rate - 1e-6), 0, length))
            step = most or max(length, 1)
            for at in range(low, high, step):
                yield segment.start_s + at / rate, self.samples.read(first + at, first + min(at + step, high))


@dataclass(frozen=True, eq=False)
class Recording:
    """Signals on one time base. `start_clock_s` is the time of day of second 0 (s after midnight) where known."""

    name: str
    signals: tuple[Signal, ...]
    segments: tuple[Segment, ...]
    notes: tuple[Note, ...] = ()
    annotations: tuple[Annotation, ...] = ()
    start_clock_s: float | None = None

    @property
    def channel_names(self) -> tuple[str, ...]:
        return tuple(signal.name for signal in self.signals)

    @property
    def duration_s(self) -> float:
        """From the start of the first segment to the end of the last, breaks included."""
        return self.segments[-1].stop_s - self.segments[0].start_s if self.segments else 0.0

    def signal(self, name: str) -> Signal:
        """The channel of that name, in its exact spelling or, where only one fits, in any letter case.

        Raises
        ------
        RecordingError
            If there is none; the message lists those there are.
        """
        for signal in self.signals:
            if signal.name == name:
                return signal
        alike = [signal for signal in self.signals if signal.name.casefold() == name.strip().casefold()]
        if len(alike) == 1:
            return alike[0]
        names = ", ".join(f"'{known}'" for known in self.channel_names) or "none"
        raise RecordingError(f"no channel '{name}'; the file has: {names}")

    def with_signal(self, signal: Signal) -> "Recording":
        """This recording with one more channel, made from its own."""
        if signal.name in self.channel_names:
            raise RecordingError(f"there is a channel '{signal.name}' already")
        return replace(self, signals=(*self.signals, signal))

    def of_kind(self, *kinds: str) -> tuple[Signal, ...]:
        """The channels guessed to be of one of these kinds, in the order of `kinds`."""
        return tuple(signal for kind in kinds for signal in self.signals if signal.kind == kind)


def counted(n: int, noun: str) -> str:
    """'1 line', '2 lines'."""
    return f"{n} {noun}" if n == 1 else f"{n} {noun}s"


def one_line(text: str, most: int = 60) -> str:
    """A stranger's text made fit for a message: printable, one line, short."""
    clean = "".join(c if c.isprintable() else "?" for c in text)
    return clean if len(clean) <= most else clean[: most - 1] + "…"


def unique_names(names: Sequence[str]) -> list[str]:
    """Channel names without blanks or doubles: the second 'Flow' becomes 'Flow 2'."""
    seen: set[str] = set()
    result = []
    for index, raw in enumerate(names, start=1):
        base = one_line(raw.strip(), 80) or f"channel {index}"
        name, again = base, 2
        while name in seen:
            name, again = f"{base} {again}", again + 1
        seen.add(name)
        result.append(name)
    return result
