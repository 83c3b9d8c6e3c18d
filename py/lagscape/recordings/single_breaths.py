"""The single breaths of one channel over all its unbroken stretches, with units, notes and quality."""

from dataclasses import dataclass

import numpy as np

from lagscape.recordings.breath_detection import breath_signal, marked_breaths
from lagscape.recordings.breath_quality import FEWEST_SAMPLES, JudgedPiece, breath_quality, no_breaths
from lagscape.recordings.breath_result import BreathQuality, BreathTable
from lagscape.recordings.breath_volume import LITRES, RELATIVE, VolumeReading, volume_reading
from lagscape.recordings.cycles import Thresholds
from lagscape.recordings.envelope import WorkingPiece
from lagscape.recordings.masks import MaskedStretch
from lagscape.recordings.recording import Signal
from lagscape.recordings.stepwise import Steps

__all__ = ["MaskedPiece", "single_breath_steps"]

_SLOW_HZ = 8.0


@dataclass(frozen=True, eq=False)
class MaskedPiece:
    """An unbroken stretch, what of it is masked, and the same as a mask of its samples."""

    piece: WorkingPiece
    masked: list[MaskedStretch]
    hidden: np.ndarray


def single_breath_steps(
    channel: Signal, kind: str, pieces: list[MaskedPiece], breath_hz: float | None, thresholds: Thresholds
) -> Steps[BreathTable]:
    """Mark and measure every breath, in steps that count thousandths of the time it takes.

    Parameters
    ----------
    channel : Signal
        Its name and unit say what volume may be claimed.
    kind : str
        ventilation, airflow or effort.
    pieces : list of MaskedPiece
    breath_hz : float or None
        The usual breathing frequency.
    thresholds : Thresholds

    Returns
    -------
    BreathTable
        Empty, with the reason, where the signal shows no single breaths.
    """
    reading = volume_reading(channel.name, channel.unit, kind)
    if kind == "ventilation":
        return _empty(reading, no_breaths("The signal is ventilation already; it has no single breaths."))
    if breath_hz is None:
        return _empty(reading, no_breaths("No breathing frequency stands out; no breath was marked."))
    per_breath = channel.sampling_frequency_hz / breath_hz
    if per_breath < FEWEST_SAMPLES:
        return _empty(reading, no_breaths(f"{per_breath:.1f} samples a breath are too few to mark single breaths; it takes {FEWEST_SAMPLES:g}."))
    judged: list[JudgedPiece] = []
    done, n_samples = 0, sum(item.piece.values.size for item in pieces)
    for item in pieces:
        yield 800 * done // n_samples, 1000
        signal = breath_signal(item.piece, item.hidden, breath_hz, reading.method == "flow")
        yield (800 * done + 200 * item.piece.values.size) // n_samples, 1000
        done += item.piece.values.size
        spans = [(stretch.start_s, stretch.stop_s) for stretch in item.masked]
        judged.append(JudgedPiece(item.piece, signal, marked_breaths(signal, spans, thresholds.shortest_pause_s), item.masked))
    yield 800, 1000
    quality = breath_quality(judged, channel.sampling_frequency_hz, reading.method == "flow")
    return _table(judged, reading, quality, _notes(reading, channel.sampling_frequency_hz, breath_hz))


def _table(judged: list[JudgedPiece], reading: VolumeReading, quality: BreathQuality, notes: tuple[str, ...]) -> BreathTable:
    start, turn, end, own = (
        np.concatenate([np.empty(0), *(getattr(item.marked, name) for item in judged)]) for name in ("start_s", "peak_s", "end_s", "volumes")
    )
    followed = tuple(word for item in judged for word in item.marked.followed_by)
    if reading.method == "timing":
        nothing = np.full(start.size, np.nan)
        return BreathTable(start, nothing, end, followed, nothing, "", None, "", quality, notes)
    middle = float(np.median(own)) if own.size else None
    if reading.litres is not None:
        return BreathTable(start, turn, end, followed, own * reading.litres, LITRES, None, LITRES, quality, notes)
    return BreathTable(start, turn, end, followed, own / middle if middle else own, RELATIVE, middle, reading.own_unit, quality, notes)


def _empty(reading: VolumeReading, quality: BreathQuality) -> BreathTable:
    nothing = np.empty(0)
    return BreathTable(nothing, nothing, nothing, (), nothing, "", None, reading.own_unit, quality, ())


def _notes(reading: VolumeReading, sampling_frequency_hz: float, breath_hz: float) -> tuple[str, ...]:
    """What the channel's nature and its sampling cost."""
    notes = list(reading.notes)
    if reading.method != "timing" and sampling_frequency_hz < _SLOW_HZ:
        half = np.pi * breath_hz / sampling_frequency_hz
        mean, most = 1.0 - np.sin(half) / half, 1.0 - np.cos(half)
        notes.append(
            f"At {sampling_frequency_hz:g} samples a second peaks fall between samples: read off them, volumes would come out "
            f"{100.0 * mean:.1f} % too small, up to {100.0 * most:.0f} %. They are read off a curve through the samples instead. "
            "What is quicker than half the sampling rate is lost, and so is what the recorder itself averages away."
        )
    return tuple(notes)
