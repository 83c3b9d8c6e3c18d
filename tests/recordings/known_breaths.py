"""Breathing built breath by breath, so that the start, turn, end and volume of each are known; made without the package under test."""

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Known:
    """`volume` (L) and `flow` (L/s) at `times_s`; of each breath its start, turn, end (s) and volume (L), shape (n,)."""

    times_s: np.ndarray
    volume: np.ndarray
    flow: np.ndarray
    start_s: np.ndarray
    turn_s: np.ndarray
    end_s: np.ndarray
    volumes: np.ndarray


def breathe(
    *, rate_hz, duration_s=900.0, breath_s=4.0, inspired=0.4, cycle_s=None, breaths_a_cycle=8, spread=0.1, jitter=0.06, tidal=0.5,
    smallest=0.3, rest_s=0.0, seed=1, average=False, hiss=1e-3,
) -> Known:
    """Breaths of half a cosine in and half a cosine out, `inspired` of the breath's length being in.

    Without `cycle_s` they follow one another, each after `rest_s` at the resting level. With it, `breaths_a_cycle` of them wax and wane
    (from `smallest` of the largest) in every cycle and the rest of it is apnoea. `spread` and `jitter` are the standard deviations of
    size and length. With `average` a sample is the mean over its own time, as a slow recorder makes it; else it is the value at its
    time. `hiss` is a recorder's own noise, a share of the tidal volume: without it, rest lies exactly at the lowest value there is, as
    a clipped signal does.
    """
    rng = np.random.default_rng(seed)
    starts, lengths, sizes = [], [], []
    at, cycle = 1.0, 0
    while at < duration_s - 2.0 * breath_s:
        n = breaths_a_cycle if cycle_s else 1
        for k in range(n):
            length = breath_s * max(1.0 + jitter * rng.normal(), 0.5)
            waxing = np.sin(np.pi * (k + 1.0) / (n + 1.0)) if cycle_s else 1.0
            waxing = smallest + (1.0 - smallest) * (waxing - np.sin(np.pi / (n + 1.0))) / (1.0 - np.sin(np.pi / (n + 1.0))) if cycle_s else 1.0
            starts.append(at)
            lengths.append(length)
            sizes.append(tidal * waxing * max(1.0 + spread * rng.normal(), 0.3))
            at += length + rest_s
        cycle += 1
        if cycle_s:
            at = max(1.0 + cycle * cycle_s, at)
    starts, lengths, sizes = np.array(starts), np.array(lengths), np.array(sizes)
    inside = starts + lengths < duration_s - 0.5
    starts, lengths, sizes = starts[inside], lengths[inside], sizes[inside]
    t = np.arange(round(duration_s * rate_hz)) / rate_hz
    if average:
        parts = 40
        fine = t[:, None] + (np.arange(parts) + 0.5) / parts / rate_hz
        volume = _volume(fine.ravel(), starts, lengths, sizes, inspired)[0].reshape(fine.shape).mean(axis=1)
        flow = _volume(fine.ravel(), starts, lengths, sizes, inspired)[1].reshape(fine.shape).mean(axis=1)
    else:
        volume, flow = _volume(t, starts, lengths, sizes, inspired)
    volume, flow = (values + hiss * tidal * rng.normal(size=t.size) for values in (volume, flow))
    return Known(t, volume, flow, starts, starts + inspired * lengths, starts + lengths, sizes)


def _volume(t, starts, lengths, sizes, inspired):
    which = np.clip(np.searchsorted(starts, t, side="right") - 1, 0, None)
    part = (t - starts[which]) / lengths[which]
    on = (part >= 0.0) & (part < 1.0)
    rising = part < inspired
    phase = np.where(rising, part / inspired, 1.0 + (part - inspired) / (1.0 - inspired)) * np.pi
    share = np.where(rising, inspired, 1.0 - inspired)
    volume = np.where(on, sizes[which] * 0.5 * (1.0 - np.cos(phase)), 0.0)
    flow = np.where(on, sizes[which] * 0.5 * np.sin(phase) * np.pi / (share * lengths[which]), 0.0)
    return volume, flow


def noisy(values, noise_db, seed=1, exponent=0.0):
    """The values with noise whose power is `noise_db` under theirs (variance); its spectrum falls as frequency to -exponent."""
    rng = np.random.default_rng(1000 + seed)
    noise = rng.normal(size=values.size)
    if exponent:
        spectrum = np.fft.rfft(noise)
        ramp = np.maximum(np.arange(spectrum.size), 1.0)
        noise = np.fft.irfft(spectrum * ramp ** (-0.5 * exponent), values.size)
    return values + noise / np.std(noise) * np.std(values) * 10.0 ** (-noise_db / 20.0)


def in_memory(*channels, rate_hz=8.0, segments=None):
    """A recording of channels (name, unit, kind, values) of one rate, unbroken or in the `segments` (start, stop in s) given."""
    from lagscape.recordings.recording import ArraySamples, Recording, Segment, Signal

    size = channels[0][3].size
    spans = tuple(Segment(*span) for span in segments or [(0.0, size / rate_hz)])
    firsts = tuple(np.cumsum([0, *(round(span.duration_s * rate_hz) for span in spans[:-1])]).tolist())
    made = (
        Signal(name, unit, kind, rate_hz, size, spans, firsts, ArraySamples(values.astype(np.float32)))
        for name, unit, kind, values in channels
    )
    return Recording("invented", tuple(made), spans)


def breaths_of(values, rate_hz, *, name="Volume", unit="L", kind="effort", **options):
    """The table of single breaths that the package makes of one channel."""
    from lagscape.recordings import measure_breathing

    return measure_breathing(in_memory((name, unit, kind, values), rate_hz=rate_hz), name, kind=kind, **options).breath_table


def wrong_share(truth: Known, turn_s: np.ndarray) -> float:
    """(missed + false) over known breaths: each known breath may claim one mark within half of its length of its turn, in time order."""
    taken = np.zeros(turn_s.size, dtype=bool)
    missed = 0
    for turn, length in zip(truth.turn_s, truth.end_s - truth.start_s, strict=True):
        near = np.flatnonzero(~taken & (np.abs(turn_s - turn) < 0.5 * length))
        if near.size:
            taken[near[np.abs(turn_s[near] - turn).argmin()]] = True
        else:
            missed += 1
    return (missed + int((~taken).sum())) / truth.turn_s.size
