"""Open a recording, whatever its form."""

import os
from pathlib import Path

from lagscape.recordings.csv_reader import csv_steps
from lagscape.recordings.csv_text import Source
from lagscape.recordings.edf import edf_steps
from lagscape.recordings.edf_header import looks_like_edf
from lagscape.recordings.recording import Progress, Recording
from lagscape.recordings.stepwise import Steps, finished

__all__ = ["read_recording", "recording_steps"]


def read_recording(
    source: Source,
    *,
    name: str | None = None,
    sampling_frequency_hz: float | None = None,
    time_column: str | None = None,
    time_unit: str | None = None,
    progress: Progress | None = None,
) -> Recording:
    """Open a recording: EDF, EDF+ or a text table (CSV), told apart by what the file holds, not by its name.

    Parameters
    ----------
    source : path, bytes or binary file
        Text tables are read in blocks of 4 MB and kept in single precision. Of an EDF file only the header and the marks are
        read; a stream must stay open as long as the recording is used, and be able to be positioned.
    name : str, optional
        What to call the recording; the file's name by default.
    sampling_frequency_hz : float, optional
        Samples a second, for text tables. Needed for a table without a time column; where there is one, the rate given wins.
    time_column : str, optional
        Name of the column that holds the time.
    time_unit : str, optional
        Unit of a numeric time column: s, ms, us, min or h.
    progress : callable, optional
        Called with bytes done and bytes in all (None where unknown); returning False cancels.

    Returns
    -------
    Recording
        Times in s from the first sample. What was repaired stands in its notes.

    Raises
    ------
    RecordingError
        If it cannot be read; the message says why and what to do.
    ReadCancelled
        If the progress callback returned False.
    """
    steps = recording_steps(
        source, name=name, sampling_frequency_hz=sampling_frequency_hz, time_column=time_column, time_unit=time_unit
    )  # fmt: skip
    return finished(steps, progress)


def recording_steps(
    source: Source,
    *,
    name: str | None = None,
    sampling_frequency_hz: float | None = None,
    time_column: str | None = None,
    time_unit: str | None = None,
) -> Steps[Recording]:
    """`read_recording` in steps; counts bytes."""
    if looks_like_edf(_head(source)):
        return (yield from edf_steps(source, name=name))
    steps = csv_steps(
        source, name=name, sampling_frequency_hz=sampling_frequency_hz, time_column=time_column, time_unit=time_unit
    )  # fmt: skip
    return (yield from steps)


def _head(source: Source) -> bytes:
    """The first 256 bytes, without moving a stream; empty where they cannot be had (the readers say why)."""
    try:
        if isinstance(source, bytes | bytearray | memoryview):
            return bytes(source[:256])
        if isinstance(source, str | os.PathLike):
            with Path(source).open("rb") as stream:
                return stream.read(256)
        here = source.tell()
        head = source.read(256)
        source.seek(here)
    except (AttributeError, OSError, ValueError):
        return b""
    return bytes(head) if isinstance(head, bytes | bytearray | memoryview) else b""
