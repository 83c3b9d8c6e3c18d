"""From a breathing signal to its cycles of waxing and waning."""

from dataclasses import replace

import numpy as np

from lagscape.errors import RecordingError
from lagscape.recordings.breathing_result import BreathingCycle, BreathingMeasurement, Breaths, Stretch
from lagscape.recordings.cycles import Burst, Thresholds, bursts_of, local_peak
from lagscape.recordings.envelope import Envelope, WorkingPiece, breath_frequency, envelope_of, working_piece_steps
from lagscape.recordings.kinds import BREATHING_KINDS
from lagscape.recordings.loop_gain import loop_gain_from_duty_ratio
from lagscape.recordings.masks import MaskedStretch, hidden_samples, masked_stretches
from lagscape.recordings.recording import Progress, Recording, Signal
from lagscape.recordings.single_breaths import MaskedPiece, single_breath_steps
from lagscape.recordings.stepwise import Steps, finished, part_of

__all__ = ["breathing_steps", "measure_breathing"]

_SLOWEST_RATE_HZ = 1.5
_SHORTEST_S = 60.0
_USUAL_BREATH_HZ = 0.25
_SAMPLES_PER_BREATH = 6.0
_REDUCED, _CYCLES, _ALL = 300, 700, 1000
"""Progress when the samples are reduced, when the cycles are found, and in the end, by the time that each takes."""


def measure_breathing(
    recording: Recording,
    signal: str | None = None,
    *,
    window: tuple[float, float] | None = None,
    kind: str | None = None,
    thresholds: Thresholds | None = None,
    progress: Progress | None = None,
) -> BreathingMeasurement:
    """Find the cycles of periodic breathing in one signal.

    Parameters
    ----------
    recording : Recording
    signal : str, optional
        Name of the channel; by default the first that looks like ventilation, airflow or effort.
    window : (start, stop), optional
        In s from the start of the recording; the whole recording by default.
    kind : str, optional
        ventilation, airflow or effort, where the guess is wrong.
    thresholds : Thresholds, optional
    progress : callable, optional
        Called with thousandths done and 1000; returning False cancels.

    Returns
    -------
    BreathingMeasurement
        With no cycles where there is no periodic breathing.

    Raises
    ------
    RecordingError
        If there is no such channel, it is no breathing signal, is sampled too slowly, or the window is empty or shorter
        than a minute.

    Notes
    -----
    Deterministic. A pause shorter than about a breath cannot be told from a long breath.
    """
    return finished(breathing_steps(recording, signal, window=window, kind=kind, thresholds=thresholds), progress)


def breathing_steps(
    recording: Recording,
    signal: str | None = None,
    *,
    window: tuple[float, float] | None = None,
    kind: str | None = None,
    thresholds: Thresholds | None = None,
) -> Steps[BreathingMeasurement]:
    """`measure_breathing` in steps; counts thousandths of the time that a whole night takes."""
    thresholds = thresholds or Thresholds()
    channel = _channel(recording, signal, kind)
    window = _window(recording, window)
    every_piece = yield from part_of(working_piece_steps(channel, window), 0, _REDUCED, _ALL)
    pieces = [piece for piece in every_piece if piece.values.size / piece.rate_hz > 10.0]
    if sum(piece.values.size / piece.rate_hz for piece in pieces) < _SHORTEST_S:
        raise RecordingError(f"'{channel.name}' holds less than {_SHORTEST_S:.0f} s of unbroken signal between {window[0]:g} and {window[1]:g} s")
    notes: list[str] = []
    kind = _kind(channel, kind, pieces, notes)
    is_ventilation = kind == "ventilation"
    if not is_ventilation and channel.sampling_frequency_hz < _SLOWEST_RATE_HZ:
        raise RecordingError(
            f"'{channel.name}' has {channel.sampling_frequency_hz:g} samples a second; to see single breaths it takes at least "
            f"{_SLOWEST_RATE_HZ:g}. If it is ventilation already, say so (kind='ventilation')"
        )
    breath_hz = breath_frequency(pieces)
    smoothing_hz = _USUAL_BREATH_HZ if is_ventilation or breath_hz is None else breath_hz
    cycles: list[BreathingCycle] = []
    stretches: list[Stretch] = []
    masked: list[MaskedStretch] = []
    envelopes: list[Envelope] = []
    breaths: list[Breaths] = []
    masked_pieces: list[MaskedPiece] = []
    done, n_samples = 0, sum(piece.values.size for piece in pieces)
    for piece in pieces:
        yield _REDUCED + (_CYCLES - _REDUCED) * done // n_samples, _ALL
        envelope = envelope_of(piece, smoothing_hz, is_ventilation)
        here = masked_stretches(piece, thresholds, envelope.smoothing_s, is_ventilation)
        hidden = hidden_samples(piece, here)
        yield _REDUCED + (_CYCLES - _REDUCED) * (done + piece.values.size // 2) // n_samples, _ALL
        done += piece.values.size
        found = _cycles(bursts_of(envelope, hidden, thresholds, is_ventilation), here, thresholds, len(cycles))
        stretches += _stretches(piece, found)
        cycles += found
        masked += here
        envelopes.append(envelope)
        masked_pieces.append(MaskedPiece(piece, here, hidden))
        if not is_ventilation and breath_hz is not None:
            breaths.append(_breaths(envelope, hidden, breath_hz))
    table = yield from part_of(single_breath_steps(channel, kind, masked_pieces, breath_hz, thresholds), _CYCLES, _ALL, _ALL)
    if not is_ventilation and breath_hz is not None and channel.sampling_frequency_hz < _SAMPLES_PER_BREATH * breath_hz:
        breaths = []
    masked += _gaps(pieces)
    return BreathingMeasurement(
        channel.name, channel.unit, kind, window, channel.sampling_frequency_hz, thresholds, tuple(cycles), tuple(stretches),
        tuple(sorted(masked, key=lambda m: m.start_s)), tuple(envelopes), _all_breaths(breaths),
        None if is_ventilation else breath_hz, tuple(notes), table,
    )  # fmt: skip


def _channel(recording: Recording, name: str | None, kind: str | None) -> Signal:
    if kind is not None and kind not in BREATHING_KINDS:
        raise RecordingError(f"kind must be one of {', '.join(BREATHING_KINDS)}, got '{kind}'")
    if name is not None:
        channel = recording.signal(name)
    else:
        fitting = recording.of_kind(*BREATHING_KINDS, "unknown")
        if not fitting:
            raise RecordingError("no channel looks like breathing; the file has: " + ", ".join(f"'{n}'" for n in recording.channel_names))
        channel = fitting[0]
    if kind is None and channel.kind not in (*BREATHING_KINDS, "unknown"):
        raise RecordingError(
            f"'{channel.name}' looks like {channel.kind}, not like breathing; choose a ventilation, airflow or effort channel, "
            "or state its kind"
        )
    return channel


def _window(recording: Recording, window: tuple[float, float] | None) -> tuple[float, float]:
    start, stop = recording.segments[0].start_s, recording.segments[-1].stop_s
    if window is None:
        return start, stop
    if not (np.isfinite(window[0]) and np.isfinite(window[1]) and window[0] < window[1]):
        raise RecordingError(f"the window must end after it starts (s), got {window[0]:g} to {window[1]:g}")
    if window[1] <= start or window[0] >= stop:
        raise RecordingError(f"the window {window[0]:g} to {window[1]:g} s lies outside the recording ({start:g} to {stop:g} s)")
    return max(float(window[0]), start), min(float(window[1]), stop)


def _kind(channel: Signal, stated: str | None, pieces: list[WorkingPiece], notes: list[str]) -> str:
    if stated is not None:
        return stated
    values = np.concatenate([piece.values[~piece.missing] for piece in pieces])
    swings_below = values.size > 0 and float(np.percentile(values, 5.0)) < -0.1 * float(np.percentile(values, 95.0))
    if channel.kind == "ventilation" and swings_below:
        notes.append(f"'{channel.name}' is called ventilation but swings below zero; it was taken as airflow.")
        return "airflow"
    if channel.kind != "unknown":
        return channel.kind
    if not swings_below and _is_slow(pieces):
        notes.append(f"'{channel.name}' is never negative and shows no single breaths; it was taken as ventilation.")
        return "ventilation"
    notes.append(f"'{channel.name}' does not say what it is; it was taken as effort.")
    return "effort"


def _is_slow(pieces: list[WorkingPiece]) -> bool:
    """Whether nearly all of the signal's power lies below the frequencies of breaths."""
    from scipy.signal import welch

    longest = max(pieces, key=lambda piece: piece.values.size)
    n = min(longest.values.size, round(200.0 * longest.rate_hz))
    frequency, power = welch(longest.values, longest.rate_hz, nperseg=n)
    slow = power[(frequency > 0.006) & (frequency < 0.08)].sum()
    quick = power[(frequency >= 0.1) & (frequency < 0.75)].sum()
    return bool(slow > 10.0 * quick)


def _cycles(bursts: list[Burst], masked: list[MaskedStretch], thresholds: Thresholds, n_before: int) -> list[BreathingCycle]:
    """Neighbouring bursts into cycles, those into rows; rows that are no periodic breathing are dropped."""
    rows: list[list[BreathingCycle]] = [[]]
    lengths = np.diff([burst.onset_s for burst in bursts])
    for i, length in enumerate(lengths):
        usual = float(np.median(lengths[max(i - 2, 0) : i + 3]))
        alike = usual / thresholds.largest_step <= length <= usual * thresholds.largest_step
        if alike and thresholds.shortest_cycle_s <= length <= thresholds.longest_cycle_s:
            rows[-1].append(_cycle(bursts[i], bursts[i + 1], masked, thresholds))
        elif rows[-1]:
            rows.append([])
    result = [cycle for row in rows if _is_periodic(row, thresholds) for cycle in row]
    return [replace(cycle, number=n_before + i) for i, cycle in enumerate(result, start=1)]


def _is_periodic(row: list[BreathingCycle], thresholds: Thresholds) -> bool:
    used = [cycle for cycle in row if not cycle.excluded]
    if len(used) < max(thresholds.fewest_in_a_row, 2):
        return False
    if float(np.median([cycle.wane_s / cycle.cycle_length_s for cycle in used])) < thresholds.shortest_wane_share:
        return False
    irregular = float(np.median(np.abs(np.diff(np.log([cycle.cycle_length_s for cycle in row])))))
    shallow = float(np.median([cycle.pause_level for cycle in used])) >= thresholds.apnoea_below
    return irregular <= (thresholds.irregular_if_shallow if shallow else thresholds.most_irregular)


def _cycle(burst: Burst, following: Burst, masked: list[MaskedStretch], thresholds: Thresholds) -> BreathingCycle:
    start, stop = burst.onset_s, following.onset_s
    end = float(np.clip(burst.end_s, start, stop))
    touched = next((m for m in masked if m.start_s < stop and m.stop_s > start), None)
    pause = "apnoea" if burst.pause_level < thresholds.apnoea_below and end < stop else "hypopnoea"
    duty = (end - start) / (stop - start) if pause == "apnoea" else None
    gain = loop_gain_from_duty_ratio(duty) if duty else None
    return BreathingCycle(
        0, start, end, stop, burst.peak, burst.peak_s, pause, burst.pause_level, burst.wane_s, burst.gradual, duty, gain,
        touched is not None, touched.reason if touched else "",
    )  # fmt: skip


def _stretches(piece: WorkingPiece, cycles: list[BreathingCycle]) -> list[Stretch]:
    """The piece from end to end, cut where periodic breathing starts and stops."""
    start, stop = piece.start_s, piece.start_s + piece.values.size / piece.rate_hz
    result: list[Stretch] = []
    reached = start
    i = 0
    while i < len(cycles):
        j = i
        while j + 1 < len(cycles) and cycles[j + 1].start_s <= cycles[j].stop_s + 1e-6:
            j += 1
        a, b = max(cycles[i].start_s, reached), min(cycles[j].stop_s, stop)
        if a > reached:
            result.append(Stretch(reached, a, False, 0))
        result.append(Stretch(a, b, True, j - i + 1))
        reached = b
        i = j + 1
    if stop > reached:
        result.append(Stretch(reached, stop, False, 0))
    return result


def _gaps(pieces: list[WorkingPiece]) -> list[MaskedStretch]:
    ends = [piece.start_s + piece.values.size / piece.rate_hz for piece in pieces]
    return [
        MaskedStretch(end, after.start_s, "gap")
        for end, after in zip(ends[:-1], pieces[1:], strict=True)
        if after.start_s - end > 1.0 / after.rate_hz
    ]


def _breaths(envelope: Envelope, hidden: np.ndarray, breath_hz: float) -> Breaths:
    """Peaks of the motion that stand out against the breaths about them."""
    from scipy.signal import find_peaks

    usual = local_peak(envelope, hidden)
    at, _ = find_peaks(envelope.motion, distance=max(int(0.4 * envelope.rate_hz / breath_hz), 1))
    at = at[(envelope.motion[at] > 0.25 * usual[at]) & ~hidden[at]]
    return Breaths(envelope.start_s + at / envelope.rate_hz, envelope.values[at])


def _all_breaths(parts: list[Breaths]) -> Breaths:
    if not parts:
        return Breaths(np.empty(0), np.empty(0))
    return Breaths(np.concatenate([part.times_s for part in parts]), np.concatenate([part.sizes for part in parts]))
