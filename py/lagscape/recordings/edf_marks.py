"""Time-stamped annotation lists of EDF+: when each data record starts, and what was marked.

A list is `onset [0x15 duration] 0x14 text 0x14 ... 0x00` (Kemp & Olivan 2003, Clin Neurophysiol 114:1755-1761, section on
annotations); the first list of a data record has an empty text and tells when the record starts.
"""

import math

import numpy as np

from lagscape.recordings.recording import Annotation, one_line

__all__ = ["record_onsets_and_annotations"]

_MOST_ANNOTATIONS = 200_000
_LONGEST_TEXT = 200


def record_onsets_and_annotations(rows: list[list[bytes]]) -> tuple[np.ndarray, tuple[Annotation, ...], int]:
    """Judge the annotation channels.

    Parameters
    ----------
    rows : one list for each annotation channel, of the bytes of each data record

    Returns
    -------
    onsets : float array, shape (n_records,)
        Start of each data record in s as written, nan where it cannot be read.
    annotations : tuple of Annotation
        In order of onset; times in s from the start of the first data record.
    unreadable : int
        Lists that were not of the expected form.
    """
    n_records = len(rows[0])
    onsets = np.full(n_records, np.nan)
    found: list[Annotation] = []
    unreadable = 0
    for which, channel in enumerate(rows):
        for record, raw in enumerate(channel):
            for position, part in enumerate(raw.split(b"\0")):
                if not part:
                    continue
                read = _list(part)
                if read is None:
                    unreadable += 1
                    continue
                onset, duration, texts = read
                if which == 0 and position == 0:
                    onsets[record] = onset
                if len(found) < _MOST_ANNOTATIONS:
                    found += [Annotation(onset, duration, text) for text in texts if text]
    origin = float(onsets[0]) if n_records and np.isfinite(onsets[0]) else 0.0
    moved = [Annotation(mark.onset_s - origin, mark.duration_s, mark.text) for mark in found]
    return onsets, tuple(sorted(moved, key=lambda mark: mark.onset_s)), unreadable


def _list(part: bytes) -> tuple[float, float | None, list[str]] | None:
    head, *texts = part.split(b"\x14")
    onset, _, duration = head.partition(b"\x15")
    start = _seconds(onset)
    if start is None or not texts or onset[:1] not in (b"+", b"-"):
        return None
    return start, _seconds(duration) if duration else None, [one_line(text.decode("utf-8", errors="replace"), _LONGEST_TEXT) for text in texts]


def _seconds(field: bytes) -> float | None:
    try:
        value = float(field)
    except ValueError:
        return None
    return value if math.isfinite(value) and abs(value) < 1e10 else None
