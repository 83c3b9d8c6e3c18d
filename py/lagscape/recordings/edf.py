"""EDF and EDF+ recordings, read by slices: opening one costs its header and its marks, not its samples.

Our own reader, because the general library for the format reads a stream whole and stops at a damaged header; a browser
has only streams, and recorders do write damaged headers. The tests hold it against two such libraries.
"""

import io
import os
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

import numpy as np

from lagscape.errors import RecordingError
from lagscape.recordings.csv_text import Source
from lagscape.recordings.edf_header import FIXED_BYTES, EdfChannel, EdfHeader, read_header, signal_count
from lagscape.recordings.edf_marks import record_onsets_and_annotations
from lagscape.recordings.kinds import guess_kind
from lagscape.recordings.recording import (
    Annotation,
    Note,
    Progress,
    Recording,
    Segment,
    Signal,
    counted,
    report_progress,
    unique_names,
)

__all__ = ["ByteSource", "read_edf"]

_BLOCK_BYTES = 1 << 22
_HIGHEST_RATE_HZ = 1e5
_LARGE_RECORD = 1 << 16
_MOST_RECORDS = 2_000_000
_PRIVATE = "the header's patient and recording fields were not read and are not kept"


@dataclass(frozen=True, eq=False)
class ByteSource:
    """Bytes of a path or of a seekable binary file, by position. A path is open only while it is read."""

    source: Path | BinaryIO
    size: int
    name: str

    @classmethod
    def of(cls, source: Source) -> "ByteSource":
        """Raises RecordingError where the source cannot be read by position."""
        if isinstance(source, bytes | bytearray | memoryview):
            return cls(io.BytesIO(bytes(source)), len(source), "recording")
        if isinstance(source, str | os.PathLike):
            path = Path(source)
            try:
                return cls(path, path.stat().st_size, path.name)
            except (OSError, ValueError) as error:
                raise RecordingError(f"cannot open '{path.name}': {getattr(error, 'strerror', None) or error}") from error
        try:
            source.seek(0, os.SEEK_END)
            size = source.tell()
        except (AttributeError, OSError, ValueError) as error:
            raise RecordingError("an EDF file is read by position; the stream that was given cannot be positioned") from error
        return cls(source, size, Path(str(getattr(source, "name", "recording"))).name)

    @contextmanager
    def opened(self) -> Iterator[BinaryIO]:
        if isinstance(self.source, Path):
            with self.source.open("rb") as stream:
                yield stream
        else:
            yield self.source

    def read(self, stream: BinaryIO, offset: int, size: int) -> bytes:
        """Exactly `size` bytes; RecordingError where the file has become shorter or fails."""
        try:
            stream.seek(offset)
            parts = []
            left = size
            while left:
                part = stream.read(left)
                if not part:
                    raise RecordingError("the file has become shorter while it was read")
                parts.append(bytes(part))
                left -= len(part)
        except OSError as error:
            raise RecordingError(f"the file could not be read: {error.strerror or error}") from error
        return b"".join(parts)


def read_edf(source: Source, *, name: str | None = None, progress: Progress | None = None) -> Recording:
    """Open an EDF or EDF+ file. Its samples are read when they are asked for, from the same source.

    Raises
    ------
    RecordingError
        If the header cannot be made sense of; the message says why.
    """
    data = ByteSource.of(source)
    notes: list[Note] = []
    with data.opened() as stream:
        if data.size < FIXED_BYTES:
            raise RecordingError("the file is shorter than an EDF header")
        fixed = data.read(stream, 0, FIXED_BYTES)
        n_channels = signal_count(fixed, notes)
        wanted = n_channels * FIXED_BYTES
        channels = data.read(stream, FIXED_BYTES, min(wanted, data.size - FIXED_BYTES))
        header = read_header(fixed, channels, n_channels, data.size, notes)
        onsets, annotations = _marks(data, stream, header, progress, notes)
    segments, first_records = _segments(header, onsets, notes)
    signals = _signals(data, header, segments, first_records, notes)
    if not signals:
        raise RecordingError("the EDF file holds annotations but no signal")
    report_progress(progress, data.size, data.size)
    return Recording(name or data.name, signals, segments, (Note(_PRIVATE[0].upper() + _PRIVATE[1:]), *notes), annotations, header.start_clock_s)


def _marks(
    data: ByteSource, stream: BinaryIO, header: EdfHeader, progress: Progress | None, notes: list[Note]
) -> tuple[np.ndarray, tuple[Annotation, ...]]:
    """Onset of every data record (s from the first; nan where it is not given), and the annotations."""
    channels = [channel for channel in header.channels if channel.is_annotation]
    if not channels:
        if header.continuity == "D":
            notes.append(Note("the file says that it has breaks but not where; it was read as if it had none"))
        return np.full(header.n_records, np.nan), ()
    if header.n_records > _MOST_RECORDS:
        raise RecordingError(f"the EDF header makes {header.n_records} data records of the file; it is damaged")
    rows: list[list[bytes]] = [[] for _ in channels]
    for _first, stop, block in _blocks(data, stream, header, 0, header.n_records):
        for row, channel in zip(rows, channels, strict=True):
            part = block[:, channel.first_byte : channel.first_byte + 2 * channel.samples_per_record]
            row += [bytes(record) for record in part]
        report_progress(progress, header.header_bytes + stop * header.record_bytes, data.size)
    onsets, annotations, unreadable = record_onsets_and_annotations(rows)
    if unreadable:
        notes.append(Note(f"{counted(unreadable, 'annotation')} left out: not readable", unreadable))
    return onsets, annotations


def _blocks(
    data: ByteSource, stream: BinaryIO, header: EdfHeader, first: int, stop: int
) -> Iterator[tuple[int, int, np.ndarray]]:
    """Data records first to stop - 1 in blocks of about 4 MB: (first, stop, bytes of shape (n, record_bytes))."""
    step = max(_BLOCK_BYTES // header.record_bytes, 1)
    for at in range(first, stop, step):
        end = min(at + step, stop)
        raw = data.read(stream, header.header_bytes + at * header.record_bytes, (end - at) * header.record_bytes)
        yield at, end, np.frombuffer(raw, dtype=np.uint8).reshape(end - at, header.record_bytes)


def _segments(header: EdfHeader, onsets: np.ndarray, notes: list[Note]) -> tuple[tuple[Segment, ...], tuple[int, ...]]:
    """Unbroken stretches, and the first data record of each."""
    length = header.record_duration_s
    whole = (Segment(0.0, header.n_records * length),), (0,)
    if header.continuity != "D":
        return whole
    expected = np.arange(header.n_records) * length
    known = np.isfinite(onsets)
    if not known.all():
        notes.append(Note(f"{counted(int((~known).sum()), 'data record')} without a time; each was taken to follow the one before"))
    start = np.where(known, onsets, -np.inf)
    # A record that does not say where it stands, or stands before the end of the last, follows it.
    shift, late, begins = 0.0, 0, [0]
    first = float(start[0]) if known[0] else 0.0
    times = np.empty(header.n_records)
    for i in range(header.n_records):
        follows = expected[i] + shift
        stated = start[i] - first
        jump = stated - follows
        if known[i] and jump > 0.01 * length and i:
            shift += jump
            begins.append(i)
        elif known[i] and jump < -0.01 * length:
            late += 1
        times[i] = expected[i] + shift
    if late:
        notes.append(Note(f"{counted(late, 'data record')} out of order in time; each was taken to follow the one before", late))
    ends = [*begins[1:], header.n_records]
    segments = tuple(Segment(float(times[a]), float(times[a]) + (b - a) * length) for a, b in zip(begins, ends, strict=True))
    if len(segments) > 1:
        lost = segments[-1].stop_s - sum(segment.duration_s for segment in segments)
        notes.append(Note(f"{counted(len(segments) - 1, 'gap')} in time, {lost:.1f} s in all; nothing is measured across a gap",
                          len(segments) - 1, first_time_s=segments[0].stop_s))  # fmt: skip
    return segments, tuple(begins)


def _signals(
    data: ByteSource, header: EdfHeader, segments: tuple[Segment, ...], first_records: tuple[int, ...], notes: list[Note]
) -> tuple[Signal, ...]:
    channels = [channel for channel in header.channels if not channel.is_annotation and channel.samples_per_record > 0]
    signals = []
    for channel, label in zip(channels, unique_names([c.label for c in channels]), strict=True):
        rate = channel.samples_per_record / header.record_duration_s
        if rate > _HIGHEST_RATE_HZ:
            notes.append(Note(f"'{label}' states {rate:.3g} samples a second and was left out"))
            continue
        signals.append(
            Signal(
                label, channel.unit, guess_kind(label, channel.unit), rate, channel.samples_per_record * header.n_records, segments,
                tuple(record * channel.samples_per_record for record in first_records), EdfSamples(data, header, channel),
            )
        )
    return tuple(signals)


@dataclass(frozen=True, eq=False)
class EdfSamples:
    """The samples of one channel, read from the file when asked for."""

    data: ByteSource
    header: EdfHeader
    channel: EdfChannel

    def read(self, first: int, stop: int) -> np.ndarray:
        """Physical values of samples first to stop - 1, shape (stop - first,)."""
        if stop <= first:
            return np.empty(0)
        with self.data.opened() as stream:
            digital = self._by_record(stream, first, stop) if self.header.record_bytes > _LARGE_RECORD else self._by_block(stream, first, stop)
        return self.channel.offset + self.channel.gain * digital

    def _by_block(self, stream: BinaryIO, first: int, stop: int) -> np.ndarray:
        """Small data records: whole blocks of them are read and the channel cut out."""
        n = self.channel.samples_per_record
        a, b = first // n, -(-stop // n)
        parts = []
        for _, _, block in _blocks(self.data, stream, self.header, a, b):
            part = block[:, self.channel.first_byte : self.channel.first_byte + 2 * n]
            parts.append(np.ascontiguousarray(part).view("<i2").ravel())
        return np.concatenate(parts)[first - a * n : stop - a * n]

    def _by_record(self, stream: BinaryIO, first: int, stop: int) -> np.ndarray:
        """Large data records: the channel's own bytes are read from each."""
        n = self.channel.samples_per_record
        parts = []
        at = first
        while at < stop:
            record, inside = divmod(at, n)
            size = min(n - inside, stop - at)
            offset = self.header.header_bytes + record * self.header.record_bytes + self.channel.first_byte + 2 * inside
            parts.append(np.frombuffer(self.data.read(stream, offset, 2 * size), dtype="<i2"))
            at += size
        return np.concatenate(parts)
