"""Which channels a tremor is read from: the axes of one sensor together, rectified where it is raw EMG, and in which unit.

Axes are put together by the sum of their spectra, not along a principal axis: the sum does not depend on how the sensor sits on the
limb, and a movement that goes round, or turns while it is recorded, loses nothing. For movement along one line the two are equal.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from lagscape.errors import RecordingError
from lagscape.recordings.kinds import TREMOR_KINDS
from lagscape.recordings.recording import Recording, Signal

__all__ = ["Sensor", "channels_of", "rectified", "sensors_in", "to_degrees_per_s", "to_m_per_s2"]

STANDARD_GRAVITY = 9.80665
"""m/s^2, CGPM 1901."""
_ACCELERATIONS = {
    "g": STANDARD_GRAVITY, "mg": 1e-3 * STANDARD_GRAVITY, "m/s2": 1.0, "m/s²": 1.0, "m/s^2": 1.0, "m/s/s": 1.0, "mm/s2": 1e-3, "mm/s²": 1e-3,
    "mm/s^2": 1e-3,
}  # fmt: skip
_DEGREE = 57.29577951308232
_ROTATIONS = {
    "deg/s": 1.0, "°/s": 1.0, "dps": 1.0, "mdps": 1e-3, "degree/s": 1.0, "degrees/s": 1.0, "rad/s": _DEGREE, "mrad/s": 1e-3 * _DEGREE,
}  # fmt: skip
_SLOWEST_HZ = 20.0
_AXIS = re.compile(r"(?:^|(?<=[^a-zA-Z])|(?<=[a-z]))[xyzXYZ](?![a-zA-Z])")


@dataclass(frozen=True)
class Sensor:
    """The axes of one sensor, or one channel: a name for the screen, the channels' names, and what it is guessed to be."""

    name: str
    signals: tuple[str, ...]
    kind: str
    sampling_frequency_hz: float


def sensors_in(recording: Recording) -> tuple[Sensor, ...]:
    """Channels whose names differ by an axis letter alone and whose unit and rate are the same, in the order of the file.

    Three axes that are nothing else are taken for an accelerometer's where they are sampled fast enough (common practice, no source).
    """
    groups: dict[tuple[str, str, str, float, int], list[Signal]] = {}
    for signal in recording.signals:
        bare, found = _AXIS.subn("*", signal.name)
        if found:
            key = (bare.casefold(), signal.unit, signal.kind, signal.sampling_frequency_hz, signal.n_samples)
            groups.setdefault(key, []).append(signal)
    return tuple(
        Sensor(" + ".join(axis.name for axis in axes), tuple(axis.name for axis in axes), _kind_of(axes), axes[0].sampling_frequency_hz)
        for axes in groups.values()
        if len(axes) in (2, 3)
    )


def _kind_of(axes: list[Signal]) -> str:
    three = len(axes) == 3 and axes[0].sampling_frequency_hz >= _SLOWEST_HZ
    return "acceleration" if three and axes[0].kind == "unknown" else axes[0].kind


def channels_of(recording: Recording, signal: str | Sequence[str] | None) -> list[Signal]:
    """The channels named, or by default all that look like acceleration, else like rotation, else the first EMG.

    Raises
    ------
    RecordingError
        If there is none, or the axes differ in rate or length.
    """
    if signal is None:
        found = next((list(of_kind) for kind in TREMOR_KINDS if (of_kind := recording.of_kind(kind))), [])
        channels = found[:1] if found and found[0].kind == "EMG" else found
        if not channels:
            raise RecordingError("no channel looks like acceleration; the file has: " + ", ".join(f"'{n}'" for n in recording.channel_names))
    else:
        channels = [recording.signal(name) for name in ([signal] if isinstance(signal, str) else signal)]
    if not channels:
        raise RecordingError("no channel was named")
    if len({(c.sampling_frequency_hz, c.n_samples) for c in channels}) > 1:
        raise RecordingError("the axes must have one sampling rate: " + ", ".join(f"'{c.name}' {c.sampling_frequency_hz:g} Hz" for c in channels))
    return channels


def rectified(values: np.ndarray) -> np.ndarray:
    """Raw EMG turned into its size about its mean, which waxes at the rate of the bursts; an envelope, never negative, stays."""
    return values if np.nanmin(values) >= 0.0 else np.abs(values - np.nanmean(values, axis=-1, keepdims=True))


def to_m_per_s2(unit: str) -> float | None:
    """m/s^2 of one unit; None where it is no acceleration."""
    return _ACCELERATIONS.get(unit.strip().casefold())


def to_degrees_per_s(unit: str) -> float | None:
    """Degrees per second of one unit; None where it is no angular velocity."""
    return _ROTATIONS.get(unit.strip().casefold())
