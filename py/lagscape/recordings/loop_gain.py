"""Loop gain from the duty ratio of periodic breathing.

LG = 2 pi / (2 pi DR - sin 2 pi DR), with DR = ventilatory duration / cycle length: the loop gain at which the first
harmonic of a breathing pattern that is cut off at zero keeps itself going (Sands et al. 2011, Am J Respir Crit Care Med
184:1067-1075).
"""

from typing import overload

import numpy as np

from lagscape.errors import InvalidInputError

__all__ = ["loop_gain_from_duty_ratio"]


@overload
def loop_gain_from_duty_ratio(duty_ratio: float) -> float: ...
@overload
def loop_gain_from_duty_ratio(duty_ratio: np.ndarray) -> np.ndarray: ...
def loop_gain_from_duty_ratio(duty_ratio: float | np.ndarray) -> float | np.ndarray:
    """Loop gain of a periodic pattern with this duty ratio.

    Parameters
    ----------
    duty_ratio : float or array
        Ventilatory duration / cycle length, dimensionless, over 0 and up to 1.

    Returns
    -------
    float or array of the same shape
        Dimensionless; 1 at a duty ratio of 1, 2 at 0.5.

    Raises
    ------
    InvalidInputError
        If a duty ratio is not over 0 and at most 1.

    Notes
    -----
    A duty ratio of 1 (no pause) says only that the loop gain is 1 or less.
    """
    ratio = np.asarray(duty_ratio, dtype=float)
    bad = ~((ratio > 0.0) & (ratio <= 1.0))
    if bad.any():
        raise InvalidInputError(f"duty ratio must be over 0 and at most 1, got {float(ratio[bad].flat[0]):g}")
    angle = 2.0 * np.pi * ratio
    # Below this angle the difference loses digits; its series angle^3/6 (1 - angle^2/20) is good to 2e-11 there.
    small = angle < 1e-2
    difference = np.where(small, angle**3 / 6.0 * (1.0 - angle**2 / 20.0), angle - np.sin(angle))
    gain = 2.0 * np.pi / difference
    return gain if isinstance(duty_ratio, np.ndarray) else float(gain)
