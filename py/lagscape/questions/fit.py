"""A loop fitted to the patient: the most plausible numbers behind a recording, and how far they are known.

Bayes' rule with the case's numbers and their spreads as the prior (`fit_prior`), the measured features with their standard errors as the
likelihood (`fit_features`), and weighted draws for the posterior (`fit_posterior`). A recording of a cycle gives two to four features and
a loop has a dozen numbers: most stay as they were, and the answer says which.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import StrEnum

import numpy as np

from lagscape.case.case import Case
from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array
from lagscape.questions.fit_features import Feature, Likelihood, features_of
from lagscape.questions.fit_forward import shown_by
from lagscape.questions.fit_measured import Measured, RingDown, measured_from
from lagscape.questions.fit_posterior import Mode, Sample, climb, climb_steps, distinct, draw
from lagscape.questions.fit_prior import DELAYS, GAINS, Prior, prior_of
from lagscape.questions.fit_words import fit_sentences, warning_sentence
from lagscape.recordings.breathing_result import Spread
from lagscape.recordings.stepwise import Steps, finished, part_of

__all__ = [
    "DRAWS",
    "PINNED_BELOW",
    "SEED",
    "Fit",
    "FitStatus",
    "FittedFigure",
    "FittedNumber",
    "Measured",
    "Middle",
    "Misfit",
    "RingDown",
    "Spread",
    "fit_recording",
    "fit_steps",
    "measured_from",
]

DRAWS = 600
SEED = 20_240_117
"""Any fixed number would do."""

PINNED_BELOW = 0.7
"""A number is pinned down where its posterior standard deviation is under this share of its prior one: half its variance is gone."""

POOR_MISFIT = 2.5
"""Standard errors beyond which a feature is not explained: 1 in 80 by chance."""

SHIFTED_BEYOND = 0.5
"""Prior standard deviations that a number's median must move before it no longer counts as left as it was."""

FAR = 3.0
"""Prior standard deviations from which on a fitted number does not go with the case: 1 in 370 by chance."""

_ROUNDS = 12
"""Of the climb, at most."""
_DRAWN, _ALL_ROUNDS = 15, 18
"""Drawing takes about as long as three rounds, and the rest as long as three more."""
_MOVED = 0.10
"""Prior standard deviations that the most plausible loop must move a number before the fitted case changes it."""
_TRADE, _LOOSE = 0.6, 0.10
"""Correlation in size from which on sensitivity and delay stand in for each other, where both are looser than this share of themselves."""
_WORTH_SAYING = 0.1
"""Of posterior probability: a second explanation that has less is not spoken of."""
_PRIOR_DRAWS = 400
_FEW_DRAWS = 60.0
"""Effective draws under which the intervals are called rough."""


class FitStatus(StrEnum):
    """What a fit came to."""

    FITTED = "fitted"
    POOR = "poor"
    """The most plausible loop leaves a feature unexplained, or asks for a number far from the case's."""
    NOT_FITTED = "not_fitted"
    """No loop near these numbers shows anything like the recording; the case stays as it was."""


@dataclass(frozen=True)
class Middle:
    """Median and the middle 90 % of a figure."""

    low: float
    median: float
    high: float


@dataclass(frozen=True)
class FittedNumber:
    """One of the loop's numbers before and after the recording, in its specification's unit."""

    name: str
    label: str
    unit: str
    prior: Middle
    posterior: Middle
    narrowed: float
    """Posterior over prior standard deviation, of the logarithm where the number is lognormal."""
    pinned: bool
    """narrowed < PINNED_BELOW."""
    shift: float
    """How far the median moved, in prior standard deviations."""
    fitted: float
    """In the fitted case."""
    changed: bool
    """The fitted case's value differs from the case's."""


@dataclass(frozen=True)
class FittedFigure:
    """A figure that several numbers make, before and after the recording."""

    name: str
    label: str
    unit: str
    prior: Middle
    posterior: Middle
    narrowed: float
    pinned: bool


@dataclass(frozen=True)
class Misfit:
    """One measured feature against the fitted case."""

    name: str
    label: str
    unit: str
    measured: float
    fitted: float
    standard_error: float
    """Of the measurement and the model together, in `unit`."""
    standard_errors: float
    """Fitted less measured, in standard errors."""


@dataclass(frozen=True)
class Fit:
    """The answer. Where `status` is NOT_FITTED, `case` is the case as it came and numbers, figures and misfits are empty."""

    status: FitStatus
    case: Case
    numbers: tuple[FittedNumber, ...]
    """The numbers that the recording could speak of, in the case's order; the others stay as they were."""
    figures: tuple[FittedFigure, ...]
    """Sensitivity and loop gain."""
    misfits: tuple[Misfit, ...]
    trade: float
    """Correlation of ln(sensitivity) and ln(delay) in the posterior; 0 where either has no spread."""
    explanations: int
    """Separate loops that explain the recording, each with a tenth of the probability or more."""
    warning: str
    """Not empty where two explanations fit equally: more sensitivity or more delay, or two separate loops."""
    sentences: tuple[str, ...]
    effective_draws: float
    seed: int

    @property
    def pinned(self) -> tuple[str, ...]:
        """Names of the numbers that the recording pins down."""
        return tuple(item.name for item in self.numbers if item.pinned)

    @property
    def left(self) -> tuple[str, ...]:
        """Names of the case's numbers that the recording leaves about as they were: neither pinned down nor shifted."""
        spoken = {item.name for item in self.numbers if item.pinned or abs(item.shift) > SHIFTED_BEYOND}
        return tuple(name for name in self.case.numbers if name not in spoken)

    def number(self, name: str) -> FittedNumber:
        """The number of this name.

        Raises
        ------
        InvalidInputError
            If the recording could not speak of it.
        """
        for item in self.numbers:
            if item.name == name:
                return item
        there = ", ".join(item.name for item in self.numbers) or "none"
        raise InvalidInputError(f"The fit has no number {name!r:.60}; it has: {there}.")


def fit_recording(case: Case, measured: Measured, seed: int = SEED, draws: int = DRAWS) -> Fit:
    """Fit a breathing case to what was measured.

    Parameters
    ----------
    case : Case
        Its numbers are the prior: a number with basis *measured* is held as tightly as it was measured, the others as people differ.
        Levers are not laid: the recording is taken to show the patient without them.
    measured : Measured
    seed : int
        Equal seeds give equal answers.
    draws : int
        From 100 to 20,000. An interval's ends are then good to about one percent of probability with the default.

    Raises
    ------
    InvalidInputError
        If the case is no breathing case or impossible, the measurement cannot be used, or an argument is out of range.
    """
    return finished(fit_steps(case, measured, seed, draws))


def fit_steps(case: Case, measured: Measured, seed: int = SEED, draws: int = DRAWS) -> Steps[Fit]:
    """`fit_recording` in steps; counts the climb's rounds, with the draws and the tidying as so many more as take their time."""
    if case.kind != "breathing":
        raise InvalidInputError(f"A recording of breathing is fitted to a breathing case; got the {case.kind} loop. Choose the breathing loop.")
    for what, value, low, high in (("seed", seed, 0, 2**32 - 1), ("number of draws", draws, 100, 20_000)):
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise InvalidInputError(f"The {what} must be a whole number from {low} to {high}; got {value!r:.60}.")
    measured.check()
    case.loop().rest()
    prior = prior_of(case, measured)
    likelihood = Likelihood(prior, measured, features_of(measured))
    modes = distinct((yield from part_of(climb_steps(likelihood, _starts(prior), _ROUNDS), 0, _ROUNDS, _ALL_ROUNDS)))
    if not modes or _hopeless(modes[0]):
        return _refused(case, measured, seed)
    yield _ROUNDS, _ALL_ROUNDS
    sample = draw(likelihood, modes, draws, seed)
    yield _DRAWN, _ALL_ROUNDS
    numbers = _numbers(prior, sample)
    point, mode = _tidied(likelihood, modes[0], numbers)
    numbers, fitted = _fitted(prior, point, numbers)
    misfits = _misfits(likelihood, point, mode)
    figures = _figures(prior, sample, seed)
    trade, loose = _trade(prior, sample)
    shares = [float(sample.weights[sample.mode == index].sum()) for index in range(len(modes))]
    worth = [mode for mode, share in zip(modes, shares, strict=True) if share >= _WORTH_SAYING]
    explanations = max(1, len(worth))
    far = _far(prior, point)
    poor = far is not None or any(abs(item.standard_errors) > POOR_MISFIT for item in misfits)
    status = FitStatus.POOR if poor else FitStatus.FITTED
    warning = warning_sentence(trade if loose and abs(trade) >= _TRADE else 0.0, explanations, _difference(prior, worth))
    rough = sample.effective < _FEW_DRAWS
    sentences = fit_sentences(measured, numbers, figures, misfits, warning, far, rough, bool(case.levers))
    return Fit(status, fitted, numbers, figures, misfits, trade, explanations, warning, sentences, sample.effective, seed)


def _starts(prior: Prior) -> Array:
    """The middle of the prior, and four loops that differ in what is to blame: delay or gain, one chemoreflex or the other."""

    def towards(**moves: float) -> Array:
        normal = np.array([moves.get(name, 0.0) for name in prior.names])
        return np.asarray(np.linalg.solve(prior.factor, normal))

    later = dict.fromkeys(DELAYS, 1.2)
    sooner = dict.fromkeys(DELAYS, -1.2)
    return np.array(
        [
            towards(),
            towards(**later, **dict.fromkeys(GAINS, -1.2)),
            towards(**sooner, **dict.fromkeys(GAINS, 1.2)),
            towards(**{GAINS[0]: 1.5, GAINS[1]: -1.0}),
            towards(**{GAINS[0]: -1.0, GAINS[1]: 1.5}),
        ]
    )


def _hopeless(mode: Mode) -> bool:
    """Far out in the prior and still far from the recording, or a feature missed by what no person's numbers explain."""
    return bool(not np.isfinite(mode.objective) or np.max(np.abs(mode.residuals)) > 8.0)


def _middle(values: Array, weights: Array) -> Middle:
    order = np.argsort(values, kind="stable")
    mass = np.cumsum(weights[order]) - 0.5 * weights[order]
    low, median, high = np.interp((0.05, 0.5, 0.95), mass, values[order])
    return Middle(float(low), float(median), float(high))


def _deviation(values: Array, weights: Array) -> float:
    mean = float(weights @ values)
    return float(np.sqrt(weights @ (values - mean) ** 2))


def _numbers(prior: Prior, sample: Sample) -> tuple[FittedNumber, ...]:
    drawn = prior.numbers(sample.points)
    found = []
    for name in (item for item in prior.case.numbers if item in prior.names):
        item, values = prior.case.specifications[name], drawn[name]
        centre, spread = prior.centre(name), prior.spread(name)
        ends = 1.6449 * spread
        log = prior.is_lognormal(name)
        low, high = (centre * np.exp(-ends), centre * np.exp(ends)) if log else (centre - ends, centre + ends)
        before = Middle(*(float(np.clip(value, item.minimum, item.maximum)) for value in (low, centre, high)))
        narrowed = _deviation(np.log(values) if log else values, sample.weights) / spread
        after = _middle(values, sample.weights)
        shift = (np.log(after.median / centre) if log else after.median - centre) / spread
        found.append(
            FittedNumber(
                name, item.label, item.unit, before, after, narrowed, narrowed < PINNED_BELOW, float(shift), prior.case.value(name), False
            )
        )
    return tuple(found)


def _tidied(likelihood: Likelihood, best: Mode, numbers: tuple[FittedNumber, ...]) -> tuple[Array, Mode]:
    """The most plausible point once more, with every number that the recording hardly moves held at its value."""
    prior = likelihood.prior
    normal = prior.factor @ best.point
    pinned = {item.name for item in numbers if item.pinned}
    moving = {name for name, z in zip(prior.names, normal, strict=True) if name in pinned or abs(z) > _MOVED}
    if moving & set(DELAYS):
        moving |= set(DELAYS)
    free = np.array([name in moving for name in prior.names])
    start = np.where(free, best.point, 0.0)
    again = climb(likelihood, start[None], most=8, free=free) if free.any() else []
    if not again or again[0].objective > best.objective + 2.0:
        return best.point, best
    return again[0].point, again[0]


def _fitted(prior: Prior, point: Array, numbers: tuple[FittedNumber, ...]) -> tuple[tuple[FittedNumber, ...], Case]:
    """The fitted case: pinned numbers become measured; moved ones assumed, unless they were measured before; the rest stays."""
    case, values = prior.case, prior.numbers(point[None])
    changed = []
    for item in numbers:
        normal = float((prior.factor @ point)[prior.names.index(item.name)])
        follows = item.name == "sensor_delay_s" and prior.sensor_ratio is not None
        if normal == 0.0 and not item.pinned and not follows:
            changed.append(item)
            continue
        value = float(np.asarray(values[item.name])[0])
        measured = item.pinned or case.numbers[item.name].basis is Basis.MEASURED
        spread = min(item.narrowed * prior.spread(item.name), 2.0 if prior.is_lognormal(item.name) else np.inf)
        case = case.with_number(item.name, value, Basis.MEASURED if measured else Basis.ASSUMED, float(spread))
        moved = value != prior.case.value(item.name)
        changed.append(replace(item, fitted=value, changed=moved))
    return tuple(changed), case


def _difference(prior: Prior, modes: list[Mode]) -> tuple[str, str, float, float] | None:
    """Label, unit and both values of the number in which two explanations differ most, in prior standard deviations."""
    if len(modes) < 2:
        return None
    index = int(np.argmax(np.abs(prior.factor @ (modes[0].point - modes[1].point))))
    name = prior.names[index]
    item = prior.case.specifications[name]
    both = np.asarray(prior.numbers(np.array([modes[0].point, modes[1].point]))[name])
    return item.label, item.unit, float(both[0]), float(both[1])


def _far(prior: Prior, point: Array) -> str | None:
    """Name of the number that the most plausible loop has furthest from the case, where that is too far."""
    normal = np.abs(prior.factor @ point)
    return prior.names[int(np.argmax(normal))] if np.max(normal) > FAR else None


def _misfits(likelihood: Likelihood, point: Array, mode: Mode) -> tuple[Misfit, ...]:
    shown = likelihood.shown(point[None], mode.cycle)
    values = likelihood.values(shown, point[None])
    found = []
    for index, item in enumerate(likelihood.features):
        found.append(_misfit(item, float(values[item.name][0]), float(mode.residuals[index])))
    return tuple(found)


def _misfit(item: Feature, fitted: float, residual: float) -> Misfit:
    return Misfit(item.name, item.label, item.unit, item.measured, fitted, item.error, residual)


def _figures(prior: Prior, sample: Sample, seed: int) -> tuple[FittedFigure, ...]:
    """Sensitivity and loop gain, before and after."""
    before = np.random.default_rng(seed).standard_normal((_PRIOR_DRAWS, prior.size))
    expected = shown_by(prior.builder(before), before.shape[0], oxygen=False, cycles=False)
    found = []
    rows = (
        ("sensitivity_l_min_mmhg", "Chemoreflex sensitivity", "L/min/mmHg", _sensitivity(prior, before), _sensitivity(prior, sample.points)),
        ("loop_gain", "Loop gain", "", expected.loop_gain, sample.loop_gain),
    )
    for name, label, unit, old, new in rows:
        usable, used = old > 0.0, (new > 0.0) & (sample.weights > 0.0)
        if not usable.any() or not used.any():
            continue
        even = np.full(int(usable.sum()), 1.0 / usable.sum())
        weights = sample.weights[used] / sample.weights[used].sum()
        narrowed = _deviation(np.log(new[used]), weights) / max(_deviation(np.log(old[usable]), even), 1e-12)
        found.append(FittedFigure(name, label, unit, _middle(old[usable], even), _middle(new[used], weights), narrowed, narrowed < PINNED_BELOW))
    return tuple(found)


def _sensitivity(prior: Prior, points: Array) -> Array:
    loop = prior.builder(points)(np.arange(points.shape[0]))
    return np.broadcast_to(np.asarray(loop.sensitivity, dtype=float), points.shape[0])


def _trade(prior: Prior, sample: Sample) -> tuple[float, bool]:
    """Correlation of ln(sensitivity) with ln(delay), and whether both are loose."""
    delay = np.broadcast_to(np.asarray(prior.numbers(sample.points)[DELAYS[0]], dtype=float), sample.weights.size)
    a, b = np.log(_sensitivity(prior, sample.points)), np.log(delay)
    wide, long = _deviation(a, sample.weights), _deviation(b, sample.weights)
    if wide * long < 1e-12:
        return 0.0, False
    correlation = sample.weights @ ((a - sample.weights @ a) * (b - sample.weights @ b)) / (wide * long)
    return float(correlation), min(wide, long) > _LOOSE


def _refused(case: Case, measured: Measured, seed: int) -> Fit:
    from lagscape.questions.fit_words import refusal_sentences

    return Fit(FitStatus.NOT_FITTED, case, (), (), (), 0.0, 0, "", refusal_sentences(case, measured), 0.0, seed)
