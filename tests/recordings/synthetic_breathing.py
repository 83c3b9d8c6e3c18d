"""Breathing recordings with known truth, made without the package under test."""

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Truth:
    """Times in s; `values` sampled at `rate_hz`; `ventilation` is the noise-free envelope (peak 1)."""

    times_s: np.ndarray
    values: np.ndarray
    ventilation: np.ndarray
    cycle_length_s: float
    duty_ratio: float


def cut_off_sine(times_s, cycle_length_s, duty_ratio):
    """Ventilation m + A cos, peak 1, cut off at zero so that it is positive for the duty ratio's share of a cycle."""
    edge = np.cos(np.pi * duty_ratio)
    wave = np.cos(2.0 * np.pi * times_s / cycle_length_s - np.pi)
    return np.maximum(0.0, (wave - edge) / (1.0 - edge))


def periodic(
    *, cycle_length_s, duty_ratio, rate_hz, duration_s=1800.0, breath_hz=0.27, noise_db=10.0, drift=0.0, offset=0.0,
    abrupt=False, breath_jitter=0.05, seed=1,
):
    """An effort-like signal: breaths under a waxing and waning envelope, white noise `noise_db` under the breathing."""
    rng = np.random.default_rng(seed)
    t = np.arange(round(duration_s * rate_hz)) / rate_hz
    v = cut_off_sine(t, cycle_length_s, duty_ratio)
    if abrupt:
        v = (v > 0).astype(float)
    wander = np.interp(t, np.arange(0.0, duration_s + 20.0, 10.0), rng.normal(size=int(duration_s / 10.0) + 2))
    phase = 2.0 * np.pi * np.cumsum(breath_hz * (1.0 + breath_jitter * wander)) / rate_hz
    breathing = v * np.sin(phase)
    noise = rng.normal(size=t.size) * np.sqrt(np.mean(breathing**2)) * 10.0 ** (-noise_db / 20.0)
    slow = drift * np.sin(2.0 * np.pi * t / 400.0 + 1.0)
    return Truth(t, breathing + noise + slow + offset, v, cycle_length_s, duty_ratio)


def regular(*, rate_hz, duration_s=1800.0, breath_hz=0.27, noise_db=10.0, spread=0.15, drift=0.0, sighs=0, seed=1):
    """Steady breathing: every breath of its own size (standard deviation `spread` of the mean) and length, some sighs."""
    rng = np.random.default_rng(seed)
    t = np.arange(round(duration_s * rate_hz)) / rate_hz
    n = int(duration_s * breath_hz * 1.5) + 5
    starts = np.cumsum(np.concatenate(([0.0], np.maximum(1.0, rng.normal(1.0, 0.08, n)) / breath_hz)))
    sizes = np.maximum(0.2, rng.normal(1.0, spread, n + 1))
    if sighs:
        sizes[rng.choice(n, sighs, replace=False)] *= 2.5
    which = np.searchsorted(starts, t, side="right") - 1
    part = (t - starts[which]) / np.diff(np.append(starts, starts[-1] + 1.0 / breath_hz))[which]
    breathing = sizes[which] * 0.5 * (1.0 - np.cos(2.0 * np.pi * np.clip(part, 0.0, 1.0)))
    noise = rng.normal(size=t.size) * np.std(breathing) * 10.0 ** (-noise_db / 20.0)
    return t, breathing + noise + drift * np.sin(2.0 * np.pi * t / 400.0)


def as_recording(values, rate_hz, *, name="effort", gap=None):
    """A recording of one channel by way of the text reader. `gap` (start, length in s) is cut out of it."""
    from lagscape.recordings import read_recording

    times = np.arange(values.size) / rate_hz
    if gap is not None:
        keep = (times < gap[0]) | (times >= gap[0] + gap[1])
        times, values = times[keep], values[keep]
    lines = "\n".join(f"{t:.4f},{v:.6g}" for t, v in zip(times, values, strict=True))
    return read_recording(f"time_s,{name}\n{lines}\n".encode())
