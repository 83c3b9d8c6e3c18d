"""Linear delay equations as loops, for tests whose oracle is a closed form: x' = -a x - b x(t - tau)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from lagscape.loops.protocol import DriveForm, Rest

__all__ = ["LinearDrive", "linear_form", "linear_rest"]


@dataclass(frozen=True)
class LinearDrive:
    """v = y: the drive hands on what it senses."""

    has_kink: ClassVar[bool] = False

    def value(self, sensed: Any, control: Any, push: Any = 0.0) -> Any:
        return sensed[0] + push

    def gradient(self, sensed: Any, control: Any, push: Any = 0.0) -> Any:
        return np.ones_like(sensed[0] + push)[None]

    def switch(self, sensed: Any, control: Any, push: Any = 0.0) -> Any:
        return np.ones_like(sensed[0] + push)

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        return sensed[0] + push


def linear_form(a: float, b: float, tau: float) -> DriveForm:
    """x' = -a x - b x(t - tau); a and b in 1/s, tau in s. Its rest is 0."""
    return DriveForm(
        plant_names=("x",),
        control_names=(),
        plant=np.array([[-a]]),
        plant_by_output=np.zeros((1, 1)),
        input_vector=np.array([-b]),
        constant=np.zeros(1),
        sensed_rows=np.ones((1, 1)),
        sensed_delays=(tau,),
        control=np.zeros((0, 0)),
        control_by_sensed=np.zeros((0, 1)),
        control_constant=np.zeros(0),
        drive=LinearDrive(),
        silent_level=-np.inf,
    )


def linear_rest() -> Rest:
    """The rest of any of these equations."""
    return Rest(np.zeros(1), 0.0)
