"""Single breaths: when each starts, turns and ends, its rate, volume and ventilation, and how far the marks can be trusted."""

from dataclasses import dataclass

import numpy as np

from lagscape.recordings.breath_volume import LITRES
from lagscape.recordings.spread import Spread

__all__ = ["BreathQuality", "BreathTable", "StretchQuality"]

FOLLOWERS = ("breath", "pause", "break")
"""What may come after a breath: another one at once, a pause longer than a breath, or a mask or end of the signal."""

_GOOD, _FAIR = 0.9, 0.75


@dataclass(frozen=True)
class StretchQuality:
    """A stretch of about a minute (start and stop in s): how far its breaths can be trusted, 0 to 1, and how many were marked.

    None where nothing of it could be judged, because it is masked.
    """

    start_s: float
    stop_s: float
    score: float | None
    n_breaths: int


@dataclass(frozen=True)
class BreathQuality:
    """How far the marked breaths can be trusted, 0 to 1; a score of q expects about one breath in 1 / (1 - q) missed or false.

    `agreement` of two detectors, `signal_share` of the power in the breathing band that is no noise, `plausible` share of breaths,
    `unclipped` share of time and `samples_per_breath` are the signs it is made of; None where there was nothing to judge.
    """

    score: float
    reasons: tuple[str, ...]
    stretches: tuple[StretchQuality, ...]
    agreement: float | None
    signal_share: float | None
    plausible: float | None
    unclipped: float | None
    samples_per_breath: float | None

    def scores_at(self, times_s: np.ndarray) -> np.ndarray:
        """The score of the stretch that each time lies in, shape of the times; nan where there is none."""
        scores = np.full(np.shape(times_s), np.nan)
        for stretch in self.stretches:
            if stretch.score is not None:
                scores[(times_s >= stretch.start_s) & (times_s < stretch.stop_s)] = stretch.score
        return scores

    @property
    def word(self) -> str:
        """good: at most 1 breath in 10 expected wrong; fair: 1 in 4; else poor (common practice, no source)."""
        return word_of(self.score)


def word_of(score: float) -> str:
    """The word for a score from 0 to 1."""
    return "good" if score >= _GOOD else "fair" if score >= _FAIR else "poor"


@dataclass(frozen=True, eq=False)
class BreathTable:
    """Every marked breath, in time order; arrays of shape (n,).

    `start_s`, `inspiration_end_s` and `end_s` in s; a breath ends where the next starts or, before a pause or a break, where its own
    expiration is over, so that an apnoea is no breath. `followed_by` is one of FOLLOWERS. `rates_per_min` in 1/min, over each breath's
    own length. `tidal_volumes` in `volume_unit`: "L", or "median breath" where the channel is not calibrated, 1 being
    `median_breath` of its `own_unit`; "" where no volume may be claimed. nan stands for what is not known.
    """

    start_s: np.ndarray
    inspiration_end_s: np.ndarray
    end_s: np.ndarray
    followed_by: tuple[str, ...]
    tidal_volumes: np.ndarray
    volume_unit: str
    median_breath: float | None
    own_unit: str
    quality: BreathQuality
    notes: tuple[str, ...]

    def __len__(self) -> int:
        return int(self.start_s.size)

    @property
    def rates_per_min(self) -> np.ndarray:
        """Respiratory rate of each breath, 1/min."""
        return 60.0 / (self.end_s - self.start_s)

    @property
    def ventilations(self) -> np.ndarray:
        """Tidal volume times rate of each breath: L/min, or median breaths a minute."""
        return self.tidal_volumes * self.rates_per_min

    @property
    def ventilation_unit(self) -> str:
        return {"": "", LITRES: "L/min"}.get(self.volume_unit, "median breaths/min")

    @property
    def rate_per_min(self) -> Spread | None:
        """Over breathing alone: apnoeas have no part in it."""
        return Spread.of(self.rates_per_min)

    @property
    def tidal_volume(self) -> Spread | None:
        return Spread.of(self.tidal_volumes)

    @property
    def ventilation(self) -> Spread | None:
        """Of the single breaths; what is breathed while there is breathing, not the mean over apnoeas too."""
        return Spread.of(self.ventilations)

    @property
    def inspiration_s(self) -> Spread | None:
        return Spread.of(self.inspiration_end_s - self.start_s)
