"""Bringing signals to hand before they are asked for in many parts: the file is gone through once for all of them."""

from collections.abc import Iterator
from typing import Any

from lagscape.recordings.edf_header import EdfChannel
from lagscape.recordings.edf_samples import EdfFile, EdfSamples
from lagscape.recordings.recording import Signal
from lagscape.recordings.stepwise import Steps

__all__ = ["loading_steps"]


def loading_steps(*signals: Signal) -> Steps[None]:
    """Read the signals' samples from their file and keep them; no step where they are in memory already. Counts bytes.

    Parameters
    ----------
    signals : Signal
        Of one recording. One that is made from others brings those.

    Raises
    ------
    RecordingError
        If the file can no longer be read.
    """
    wanted: dict[int, tuple[EdfFile, list[EdfChannel]]] = {}
    for signal in signals:
        for samples in _in_files(signal.samples):
            wanted.setdefault(id(samples.file), (samples.file, []))[1].append(samples.channel)
    for file, channels in wanted.values():
        yield from file.keep_steps(channels)


def _in_files(store: Any) -> Iterator[EdfSamples]:
    if isinstance(store, EdfSamples):
        yield store
    for part in getattr(store, "made_of", ()):
        yield from _in_files(part)
