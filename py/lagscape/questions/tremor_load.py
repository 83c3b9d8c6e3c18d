"""A tremor unloaded and loaded: does the peak move as the mechanical-reflex loop says it must?

A mass m fixed at a lever arm l adds m l^2 to the limb's inertia, so a loop of inertia, stiffness and stretch reflex slows down by an
amount that follows from its numbers. A peak that moves so points to that loop; one that stays points elsewhere.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Any

import numpy as np

from lagscape.case.case import Case
from lagscape.errors import InvalidInputError
from lagscape.loops.reflex import ReflexLoop
from lagscape.questions.standing import Standing, judge_loop
from lagscape.recordings.tremor import TremorMeasurement, compare_tremor

__all__ = [
    "Load", "LoadAnswer", "Prediction", "Verdict", "answer_of_load", "loaded_loop", "predict_shift", "stiffness_for", "tremor_frequency",
    "velocity_response",
]  # fmt: skip

_GRAVITY = 9.80665
"""m/s^2, CGPM 1901."""
_GRID_HZ = (0.3, 60.0, 6000)
_NEAR = 1e-6
_STAYS_SHARE = 0.25
"""A shift surely under this share of the predicted one counts as none (our own limit)."""
_RULE_HZ = 1.0
"""The usual clinical rule: a fall of more than 1 Hz speaks for a mechanical part (common practice, no source)."""
_FEW_SEGMENTS, _BROAD_HZ, _OTHER_SIZE = 12, 2.0, 3.0


class Verdict(StrEnum):
    """What the load did: the peak moves as the loop says, less than it says, not at all, or too little is known."""

    MOVES = "moves"
    PARTLY = "moves less"
    STAYS = "stays"
    UNSURE = "unsure"


@dataclass(frozen=True)
class Load:
    """A mass in kg fixed to the limb at a lever arm in m from the joint.

    Raises
    ------
    InvalidInputError
        If one of them is not in the range that the reflex loop takes.
    """

    mass_kg: float
    arm_m: float

    def __post_init__(self) -> None:
        for name, value, low, high, unit in (("mass", self.mass_kg, 0.001, 20.0, "kg"), ("lever arm", self.arm_m, 0.01, 1.0, "m")):
            if not (math.isfinite(value) and low <= value <= high):
                raise InvalidInputError(f"The {name} must be from {low:g} to {high:g} {unit}; got {value:g} {unit}.")

    @property
    def added_inertia(self) -> float:
        """m l^2, kg m2."""
        return self.mass_kg * self.arm_m**2


@dataclass(frozen=True)
class Prediction:
    """What a reflex case predicts for a load: the shift of the peak in Hz, and its range over the spread of the limb's inertia."""

    shift_hz: float
    low_hz: float
    high_hz: float
    stiffness: float
    """N m/rad; that with which the case shakes at the measured unloaded peak."""


@dataclass(frozen=True)
class LoadAnswer:
    """Measured shift with its 95 % interval, the predicted one where there is one, and what follows."""

    verdict: Verdict
    shift_hz: float
    low_hz: float
    high_hz: float
    load: Load | None
    prediction: Prediction | None
    no_prediction: str
    sentence: str
    doubts: tuple[str, ...]


def velocity_response(loop: ReflexLoop, frequency_hz: np.ndarray) -> np.ndarray:
    """Size of the joint's angular velocity for a torque of one at each frequency, rad/s per N m, about the held posture.

    Notes
    -----
    s / (J s^2 + b s + k + T' G (1 + c s) e^(-s tau) / (1 + s tau_m)^2) with T' the torque's slope at the bias, T_max (1 - share^2).
    The velocity's spectrum for white torque noise is the acceleration's for noise that falls with frequency as muscle's does; without a
    reflex it peaks at sqrt(k/J) whatever the damping.
    """
    s = 2j * math.pi * np.asarray(frequency_hz, dtype=float)
    share = loop.held_mass_kg * _GRAVITY * loop.load_distance_m / loop.largest_torque_n_m
    slope = loop.largest_torque_n_m * (1.0 - share**2)
    reflex = slope * loop.reflex_gain_per_rad * (1.0 + loop.velocity_sensitivity_s * s) * np.exp(-s * loop.delay)
    joint = loop.total_inertia * s**2 + loop.damping_n_m_s_rad * s + loop.stiffness_n_m_rad
    return np.abs(s / (joint + reflex / (1.0 + loop.activation_time_s * s) ** 2))


def tremor_frequency(loop: ReflexLoop, *, exact: bool = True) -> float:
    """Where this loop shakes, Hz: its cycle where it hunts, else the peak of its answer to noise.

    Parameters
    ----------
    loop : ReflexLoop
    exact : bool
        False takes the linear frequency where the loop hunts: some per cent off, and much quicker.

    Raises
    ------
    InvalidInputError
        If it cannot hold its load, or nothing in it resonates from 0.3 to 60 Hz.
    """
    judged = judge_loop(loop)
    if not judged.margins.stable:
        length = judged.cycle_length if exact and judged.standing is Standing.HUNTS else judged.linear_cycle_length
        if length is not None:
            return 1.0 / length
    grid = np.geomspace(*_GRID_HZ)
    size = np.log(velocity_response(loop, grid))
    top = int(size.argmax())
    if top in (0, grid.size - 1):
        raise InvalidInputError("Nothing in this loop resonates between 0.3 and 60 Hz. Check its inertia, stiffness and damping.")
    left, middle, right = size[top - 1 : top + 2]
    bend = left - 2.0 * middle + right
    offset = 0.5 * (left - right) / bend if bend < 0.0 else 0.0
    return float(grid[top] * (grid[1] / grid[0]) ** offset)


def loaded_loop(loop: ReflexLoop, load: Load | None) -> ReflexLoop:
    """The loop with exactly this load on it; None for bare."""
    if load is None:
        return loop.with_numbers(held_mass_kg=0.0)
    return loop.with_numbers(held_mass_kg=load.mass_kg, load_distance_m=load.arm_m)


def stiffness_for(loop: ReflexLoop, frequency_hz: float) -> float:
    """The joint stiffness in N m/rad with which this loop shakes at the frequency, all else as it is (linear frequency).

    Raises
    ------
    InvalidInputError
        If no stiffness in the range of the reflex loop does so.
    """
    item = {entry.name: entry for entry in ReflexLoop.specifications}["stiffness_n_m_rad"]
    low, high = math.log(item.minimum), math.log(item.maximum)

    def miss(log_stiffness: float) -> float:
        return math.log(tremor_frequency(loop.with_numbers(stiffness_n_m_rad=math.exp(log_stiffness)), exact=False) / frequency_hz)

    # A stiff joint goes as the root of its stiffness: begin there, and let the false position keep a bracket from then on.
    at = min(max(math.log(loop.total_inertia * (2.0 * math.pi * frequency_hz) ** 2), low), high)
    below: tuple[float, float] | None = None
    above: tuple[float, float] | None = None
    for step in range(60):
        off = miss(at)
        if abs(off) < _NEAR:
            return math.exp(at)
        if off < 0.0:
            below = (at, off)
        else:
            above = (at, off)
        if below is None or above is None:
            if at in (low, high):
                break
            at = min(max(at - 2.0 * off - math.copysign(0.05, off), low), high)
        elif step % 3 == 2:
            at = 0.5 * (below[0] + above[0])
        else:
            at = below[0] + (above[0] - below[0]) * below[1] / (below[1] - above[1])
        if below is not None and above is not None and abs(above[0] - below[0]) < _NEAR:
            break
    raise InvalidInputError(
        f"No joint stiffness from {item.minimum:g} to {item.maximum:g} N m/rad makes this case shake at {frequency_hz:.3g} Hz. "
        "Start from a case of this limb, or set its inertia first."
    )


def predict_shift(case: Case, peak_hz: float, load: Load) -> Prediction:
    """The shift of the peak that a reflex case predicts for a load, its stiffness being such that it shakes at the unloaded peak.

    The range is that of the limb's inertia: 95 % of its spread in the case.

    Raises
    ------
    InvalidInputError
        If the case is no reflex case, cannot hold the load, or cannot shake at that peak.
    """
    if case.kind != "reflex":
        raise InvalidInputError("The shift under a load is predicted by a reflex case; choose the reflex loop first.")
    bare = loaded_loop(case.loop(), None)
    sides = 1.96 * case.spread("inertia_kg_m2")
    shifts, stiffness = [], 0.0
    for side in (0.0, -sides, sides):
        limb = bare.with_numbers(inertia_kg_m2=float(bare.inertia_kg_m2) * math.exp(side))
        limb = limb.with_numbers(stiffness_n_m_rad=stiffness_for(limb, peak_hz))
        stiffness = stiffness or float(limb.stiffness_n_m_rad)
        shifts.append(tremor_frequency(loaded_loop(limb, load), exact=False) - peak_hz)
    return Prediction(shifts[0], min(shifts), max(shifts), stiffness)


def answer_of_load(unloaded: TremorMeasurement, loaded: TremorMeasurement, load: Load | None = None, case: Case | None = None) -> LoadAnswer:
    """What the load did to the peak, against what the case's loop predicts for it.

    Parameters
    ----------
    unloaded, loaded : TremorMeasurement
    load : Load, optional
        Without it only the usual rule of 1 Hz is left.
    case : Case, optional
        A reflex case.

    Raises
    ------
    RecordingError
        If one of the two has no peak.
    """
    compared = compare_tremor(unloaded, loaded)
    shift, low, high = compared.shift_hz, compared.low_hz, compared.high_hz
    prediction, why = _prediction(case, unloaded.peak_frequency_hz or 0.0, load)
    before, after = unloaded.peak_frequency_hz, loaded.peak_frequency_hz
    told = f"With the load the peak goes from {before:.2f} to {after:.2f} Hz ({_signed(shift)} Hz, 95 % {_signed(low)} to {_signed(high)})"
    if prediction is None:
        verdict = {True: Verdict.MOVES, False: Verdict.STAYS, None: Verdict.UNSURE}[compared.moves]
        said = {
            Verdict.MOVES: "By the usual rule of 1 Hz it moves with the load, which points to the mechanical-reflex loop.",
            Verdict.STAYS: "By the usual rule of 1 Hz it stays, which points to a source elsewhere: this loop does not explain it.",
            Verdict.UNSURE: "That is too uncertain to say whether it moves by more than 1 Hz.",
        }[verdict]
        sentence = f"{told}. {said}"
    else:
        verdict = _verdict(low, high, prediction)
        told += f"; the loop of the case predicts {_signed(prediction.shift_hz)} Hz ({_signed(prediction.low_hz)} to {_signed(prediction.high_hz)})"
        sentence = f"{told}. {_said(verdict, low, high, prediction)}"
    return LoadAnswer(
        verdict, shift, low, high, load, prediction, why, sentence, _doubts(unloaded, loaded, low, high, load, prediction, verdict)
    )  # fmt: skip


def _prediction(case: Case | None, peak_hz: float, load: Load | None) -> tuple[Prediction | None, str]:
    if load is None:
        return None, "Say what the load is and at which lever arm, and the case's loop predicts the shift."
    if case is None or case.kind != "reflex":
        return None, "The case is no reflex loop, so it predicts no shift."
    try:
        return predict_shift(case, peak_hz, load), ""
    except InvalidInputError as problem:
        return None, str(problem)


def _verdict(low: float, high: float, prediction: Prediction) -> Verdict:
    if low > _STAYS_SHARE * prediction.shift_hz:
        return Verdict.STAYS
    if high >= 0.0:
        return Verdict.UNSURE
    return Verdict.PARTLY if low > prediction.high_hz else Verdict.MOVES


def _said(verdict: Verdict, low: float, high: float, prediction: Prediction) -> str:
    if verdict is Verdict.STAYS and low > 0.0:
        return "It rises, which no added inertia does to this loop: that points elsewhere, and this loop does not explain it."
    if verdict is Verdict.STAYS:
        return "It stays, which points to a source elsewhere: this loop does not explain it."
    if verdict is Verdict.UNSURE:
        return "That is too uncertain to say whether it moves with the load or stays."
    if verdict is Verdict.PARTLY:
        return "It moves, but less than the loop predicts: a mechanical part beside a source elsewhere, or a heavier limb than the case has."
    more = " further than predicted (a lighter limb than the case has)," if high < prediction.low_hz else ""
    return f"It moves with the load,{more} which points to the mechanical-reflex loop."


def _doubts(
    unloaded: TremorMeasurement, loaded: TremorMeasurement, low: float, high: float, load: Load | None, prediction: Prediction | None,
    verdict: Verdict,
) -> tuple[str, ...]:  # fmt: skip
    """What would make the answer unsure, or does."""
    doubts = []
    both: tuple[tuple[str, Any], ...] = (("unloaded", unloaded), ("loaded", loaded))
    for name, one in both:
        if one.n_segments < _FEW_SEGMENTS:
            doubts.append(f"The {name} window is short; its peak's error is a lower bound. Record a minute or more.")
        if (one.width_hz or 0.0) > _BROAD_HZ:
            doubts.append(f"The {name} peak is broad, so that its place means less.")
        if any("Aliasing" in reason for reason in one.quality_reasons):
            doubts.append(f"The {name} recording may hold a faster movement folded down (aliasing).")
    stayed = [at for at in loaded.other_peaks_hz if unloaded.peak_frequency_hz and abs(at - unloaded.peak_frequency_hz) < 0.5]
    if stayed and verdict is not Verdict.STAYS:
        doubts.append(f"Loaded, a smaller peak stays at {stayed[0]:.2f} Hz: a second source, which the load does not move, may lie under the first.")
    if unloaded.rms and loaded.rms and unloaded.unit == loaded.unit:
        ratio = loaded.rms / unloaded.rms
        if ratio > _OTHER_SIZE or ratio < 1.0 / _OTHER_SIZE:
            doubts.append("The size changed more than threefold with the load; posture, effort or fatigue may have changed as well.")
    if unloaded.signals != loaded.signals or unloaded.unit != loaded.unit:
        doubts.append("The two were measured on different channels.")
    if load is not None and prediction is not None:
        half = 0.5 * (high - low)
        if abs(prediction.shift_hz) < 2.0 * half:
            doubts.append("The load is light for so uncertain a peak: the predicted shift is under twice its error. Take a heavier one.")
        elif abs(prediction.shift_hz) < _RULE_HZ:
            doubts.append("The load is too light for the usual rule of 1 Hz; the answer rests on the prediction.")
        if prediction.high_hz - prediction.low_hz > abs(prediction.shift_hz):
            doubts.append("The limb's inertia is known so roughly that the predicted shift is vague.")
    return tuple(doubts)


def _signed(value: float) -> str:
    return f"{value:+.2f}".replace("-", "−")
