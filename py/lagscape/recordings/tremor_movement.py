"""Movement that is no tremor: a limb put elsewhere, a knock on the sensor. It is left out of the spectrum and told.

Two signs, second by second. A new posture moves the slow part of the signal (gravity turns with the sensor) far more than it usually
moves, and by more than the tremor itself. A knock is one second far larger than the seconds about it on both sides; a tremor that
sets in lasts longer than that and stays. Limits: common practice, no source.
"""

import numpy as np

__all__ = ["movement_in"]

_SECONDS = 1.0
_SLOW_S = 0.7
_SLOW_RATIO = 6.0
_POSTURE_OVER_TREMOR = 2.0
_KNOCK_RATIO = 4.0
_NEIGHBOURS = 7
_MARGIN_S = 0.5
_MOST = 0.5
"""Where more than this share looks like movement, nothing usual is left to tell it by, and nothing is masked."""


def movement_in(values: np.ndarray, rate_hz: float) -> np.ndarray:
    """True where a sample belongs to a movement that is no tremor.

    Parameters
    ----------
    values : array, shape (n_axes, n)
        One unbroken stretch without missing samples.
    rate_hz : float

    Returns
    -------
    array of bool, shape (n,)
    """
    from scipy.ndimage import median_filter, uniform_filter1d

    n = values.shape[1]
    block = max(round(_SECONDS * rate_hz), 2)
    count = n // block
    if count < _NEIGHBOURS:
        return np.zeros(n, dtype=bool)
    slow = uniform_filter1d(values, max(round(_SLOW_S * rate_hz), 1), axis=1, mode="nearest")
    fast = np.sqrt(np.sum((values - slow) ** 2, axis=0))[: count * block].reshape(count, block).max(axis=1)
    drift = np.sqrt(np.sum(np.ptp(slow[:, : count * block].reshape(-1, count, block), axis=2) ** 2, axis=0))
    # The second's own fast part too: a large tremor leaks a little of itself into the slow part.
    posture = (drift > _SLOW_RATIO * np.median(drift)) & (drift > _POSTURE_OVER_TREMOR * np.median(fast)) & (drift > fast)
    knock = fast > _KNOCK_RATIO * median_filter(fast, size=_NEIGHBOURS, mode="nearest")
    moved = posture | knock
    result = np.zeros(n, dtype=bool)
    if not moved.any() or moved.mean() > _MOST:
        return result
    margin = round(_MARGIN_S * rate_hz)
    for i in np.flatnonzero(moved):
        result[max(i * block - margin, 0) : (i + 1) * block + margin] = True
    return result
