"""Open a recording, whatever its form."""

from lagscape.recordings.csv_reader import read_csv
from lagscape.recordings.csv_text import Source
from lagscape.recordings.recording import Progress, Recording

__all__ = ["read_recording"]


def read_recording(
    source: Source,
    *,
    name: str | None = None,
    sampling_frequency_hz: float | None = None,
    time_column: str | None = None,
    time_unit: str | None = None,
    progress: Progress | None = None,
) -> Recording:
    """Read a recording from a text table (CSV).

    Parameters
    ----------
    source : path, bytes or binary file
        Text tables are read in blocks of 4 MB.
    name : str, optional
        What to call the recording; the file's name by default.
    sampling_frequency_hz : float, optional
        Samples a second. Needed for a table without a time column; where there is one, the rate given wins.
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
    return read_csv(
        source,
        name=name,
        sampling_frequency_hz=sampling_frequency_hz,
        time_column=time_column,
        time_unit=time_unit,
        progress=progress,
    )
