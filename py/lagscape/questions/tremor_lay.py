"""From a measured tremor to a reflex case: which of the loop's numbers the peaks fix, and what they become.

One peak fixes one number, the joint stiffness, the inertia being as the case has it. Two peaks with a known load between them fix two:
without a reflex f0^2 / f1^2 = (J + m l^2) / J and k = (2 pi f0)^2 J; with the case's reflex the pair J, k is found that shakes at both.
A peak that stays fixes nothing, because this loop does not explain it.
"""

from __future__ import annotations

import math

import numpy as np

from lagscape.case.case import Case
from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.loops.reflex import ReflexLoop
from lagscape.questions.lay import Change, Laying
from lagscape.questions.tremor_load import Load, LoadAnswer, Verdict, loaded_loop, stiffness_for, tremor_frequency
from lagscape.recordings.tremor import TremorMeasurement

__all__ = ["lay_tremor"]

_NEAR = 1e-4
"""The laid loop shakes at the measured peaks to this share: far inside any measurement's own error."""


def lay_tremor(case: Case, unloaded: TremorMeasurement, answer: LoadAnswer | None = None) -> Laying:
    """The reflex case with what the recording pins down on it.

    Parameters
    ----------
    case : Case
        A reflex case. What mass it holds is taken off: the numbers laid are those of the bare limb.
    unloaded : TremorMeasurement
    answer : LoadAnswer, optional
        Of the loaded recording against this one; with a load and a peak that moves it fixes the inertia too.

    Raises
    ------
    InvalidInputError
        If the case is no reflex case, there is no peak, the peak stays, moves less than this loop can explain, or does not fit the case.
    """
    if case.kind != "reflex":
        raise InvalidInputError("A tremor is laid on a reflex case; choose a reflex loop first.")
    if unloaded.peak_frequency_hz is None:
        raise InvalidInputError("No peak stands out of the spectrum, so there is nothing to lay on the case. Choose another window or channel.")
    if answer is not None and answer.verdict is Verdict.STAYS:
        raise InvalidInputError(
            "The peak stays when the load is added, which points to a source elsewhere. This loop does not explain such a tremor, so nothing "
            "is laid on the case."
        )
    if answer is not None and answer.verdict is Verdict.PARTLY:
        raise InvalidInputError(
            "The peak moves less than this loop predicts, so laying it would explain by this loop what may come from elsewhere. Where the limb "
            "is heavier than the case says, set its inertia first."
        )
    peak, error = unloaded.peak_frequency_hz, _relative(unloaded.peak_error_hz, unloaded.peak_frequency_hz)
    bare = loaded_loop(case.loop(), None)
    after: dict[str, tuple[float, float, str]] = {}
    if case.value("held_mass_kg") > 0.0:
        after["held_mass_kg"] = (0.0, case.specifications["held_mass_kg"].spread_for(Basis.MEASURED), "the numbers laid are those of the bare limb")
    notes = ["Damping, the reflex and its delay stay as the case has them; the frequency of a peak does not tell them."]
    if answer is not None and answer.load is not None and answer.verdict is Verdict.MOVES:
        loaded_peak = peak + answer.shift_hz
        inertia, stiffness = _both(case, bare, peak, loaded_peak, answer.load)
        # What a small error of either peak does to ln J and ln k; the loaded peak's error is what is left of the shift's interval.
        shift_error = (answer.high_hz - answer.low_hz) / (2.0 * 1.96)
        other = math.sqrt(max(shift_error**2 - (error * peak) ** 2, 0.0)) / loaded_peak
        lever = 2.0 / (1.0 - (loaded_peak / peak) ** 2)
        after["inertia_kg_m2"] = (inertia, _spread(lever * math.hypot(error, other)), "so that the load moves the peak as measured")
        after["stiffness_n_m_rad"] = (stiffness, _spread(math.hypot((lever - 2.0) * error, lever * other)), "so that the peak is the measured one")
        notes.append("Inertia and stiffness were found together: where one is too high, so is the other.")
    else:
        spread = _spread(math.hypot(2.0 * error, case.spread("inertia_kg_m2")))
        after["stiffness_n_m_rad"] = (_stiffness(bare, peak), spread, "so that the peak is the measured one")
        notes.append(
            "The shift is too uncertain to tell the inertia, so it stays as the case has it." if answer is not None and answer.load is not None
            else "One peak fixes one number. A second recording with a known load would fix the inertia too."
        )  # fmt: skip
    laid, changes = case, []
    for name, (value, spread, because) in after.items():
        before = laid.value(name)
        laid = laid.with_number(name, value, Basis.MEASURED, spread)
        item = case.specifications[name]
        changes.append(Change(name, item.label, item.unit, before, value, because))
    return Laying(laid, tuple(changes), (*notes, *_own(laid, answer)))


def _relative(error: float | None, value: float) -> float:
    return (error or 0.0) / value


def _spread(deviation: float) -> float:
    """Standard deviation of the logarithm, kept where a case takes it."""
    return min(2.0, max(0.02, deviation))


def _stiffness(bare: ReflexLoop, peak: float) -> float:
    """That with which the loop itself, cycle and all, shakes at the peak."""
    aim = peak
    for _ in range(6):
        stiffness = stiffness_for(bare, aim)
        shakes = tremor_frequency(bare.with_numbers(stiffness_n_m_rad=stiffness))
        if abs(shakes / peak - 1.0) < _NEAR:
            break
        aim *= peak / shakes
    return stiffness


def _both(case: Case, bare: ReflexLoop, peak: float, loaded_peak: float, load: Load) -> tuple[float, float]:
    """Inertia in kg m2 and stiffness in N m/rad with which the loop shakes at both peaks (Broyden 1965, from memory)."""
    wanted = np.log([peak, loaded_peak])
    inertia = load.added_inertia / ((peak / loaded_peak) ** 2 - 1.0)
    at = np.log([inertia, inertia * (2.0 * math.pi * peak) ** 2])
    share = inertia / (inertia + load.added_inertia)
    slope = np.array([[-0.5, 0.5], [-0.5 * share, 0.5]])
    items = [case.specifications[name] for name in ("inertia_kg_m2", "stiffness_n_m_rad")]
    low, high = (np.log([getattr(item, bound) for item in items]) for bound in ("minimum", "maximum"))

    def miss(point: np.ndarray) -> np.ndarray:
        limb = bare.with_numbers(inertia_kg_m2=float(np.exp(point[0])), stiffness_n_m_rad=float(np.exp(point[1])))
        return np.log([tremor_frequency(limb), tremor_frequency(loaded_loop(limb, load))]) - wanted

    if np.any(at < low) or np.any(at > high):
        at = np.clip(at, low, high)
    off = miss(at)
    for _ in range(40):
        if np.max(np.abs(off)) < _NEAR:
            return float(np.exp(at[0])), float(np.exp(at[1]))
        step = np.clip(np.linalg.solve(slope, -off), -0.5, 0.5)
        there = np.clip(at + step, low, high)
        step = there - at
        if not step.any():
            break
        new = miss(there)
        slope = slope + np.outer(new - off - slope @ step, step) / float(step @ step)
        at, off = there, new
    raise InvalidInputError(
        f"No inertia and stiffness in range make this case shake at {peak:.3g} Hz bare and {loaded_peak:.3g} Hz with the load. Check the mass "
        "and its lever arm, or start from a case of this limb."
    )


def _own(laid: Case, answer: LoadAnswer | None) -> tuple[str, ...]:
    loop = laid.loop()
    told = f"The laid loop's own tremor is at {tremor_frequency(loop):.2f} Hz"
    if answer is not None and answer.load is not None:
        told += f", with the load at {tremor_frequency(loaded_loop(loop, answer.load)):.2f} Hz"
    return (told + ".",)
