"""EDF and EDF+ recordings, read by slices: opening one costs its header and its marks, not its samples.

Our own reader, because the general library for the format reads a stream whole and stops at a damaged header; a browser
has only streams, and recorders do write damaged headers. The tests hold it against two such libraries.
"""

from typing import BinaryIO

import numpy as np

from lagscape.errors import RecordingError
from lagscape.recordings.byte_source import ByteSource
from lagscape.recordings.csv_text import Source
from lagscape.recordings.edf_header import FIXED_BYTES, EdfHeader, read_header, signal_count
from lagscape.recordings.edf_marks import record_onsets_and_annotations
from lagscape.recordings.edf_samples import EdfFile, EdfSamples
from lagscape.recordings.kinds import guess_kind
from lagscape.recordings.recording import (
    Annotation,
    Note,
    Progress,
    Recording,
    Segment,
    Signal,
    counted,
    unique_names,
)
from lagscape.recordings.stepwise import Steps, finished

__all__ = ["edf_steps", "read_edf"]

_HIGHEST_RATE_HZ = 1e5
_MOST_RECORDS = 2_000_000
_PRIVATE = "the header's patient and recording fields were not read and are not kept"


def read_edf(source: Source, *, name: str | None = None, progress: Progress | None = None) -> Recording:
    """Open an EDF or EDF+ file. Its samples are read when they are asked for, from the same source.

    Raises
    ------
    RecordingError
        If the header cannot be made sense of; the message says why.
    ReadCancelled
        If the progress callback returned False.
    """
    return finished(edf_steps(source, name=name), progress)


def edf_steps(source: Source, *, name: str | None = None) -> Steps[Recording]:
    """`read_edf` in steps; counts bytes. Without annotations there is one."""
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
        file = EdfFile(data, header)
        onsets, annotations = yield from _marks(file, stream, notes)
    segments, first_records = _segments(header, onsets, notes)
    signals = _signals(file, segments, first_records, notes)
    if not signals:
        raise RecordingError("the EDF file holds annotations but no signal")
    yield data.size, data.size
    return Recording(name or data.name, signals, segments, (Note(_PRIVATE[0].upper() + _PRIVATE[1:]), *notes), annotations, header.start_clock_s)


def _marks(file: EdfFile, stream: BinaryIO, notes: list[Note]) -> Steps[tuple[np.ndarray, tuple[Annotation, ...]]]:
    """Onset of every data record (s from the first; nan where it is not given), and the annotations."""
    header = file.header
    channels = [channel for channel in header.channels if channel.is_annotation]
    if not channels:
        if header.continuity == "D":
            notes.append(Note("the file says that it has breaks but not where; it was read as if it had none"))
        return np.full(header.n_records, np.nan), ()
    if header.n_records > _MOST_RECORDS:
        raise RecordingError(f"the EDF header makes {header.n_records} data records of the file; it is damaged")
    rows: list[list[bytes]] = [[] for _ in channels]
    for _first, stop, block in file.blocks(stream, 0, header.n_records):
        for row, channel in zip(rows, channels, strict=True):
            part = block[:, channel.first_byte : channel.first_byte + 2 * channel.samples_per_record]
            row += [bytes(record) for record in part]
        yield header.header_bytes + stop * header.record_bytes, file.data.size
    onsets, annotations, unreadable = record_onsets_and_annotations(rows)
    if unreadable:
        notes.append(Note(f"{counted(unreadable, 'annotation')} left out: not readable", unreadable))
    return onsets, annotations


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


def _signals(file: EdfFile, segments: tuple[Segment, ...], first_records: tuple[int, ...], notes: list[Note]) -> tuple[Signal, ...]:
    header = file.header
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
                tuple(record * channel.samples_per_record for record in first_records), EdfSamples(file, channel),
            )
        )
    return tuple(signals)
