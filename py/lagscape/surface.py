"""The functions a script calls, each on a case: the same code that the page runs."""

from __future__ import annotations

from lagscape.case.case import Case
from lagscape.engine.simulate import Purpose
from lagscape.questions.boundary_map import BoundaryMap, map_of, window_of
from lagscape.questions.levers import apply_levers
from lagscape.questions.response import Response, respond, run_length
from lagscape.questions.standing import judge_loop

__all__ = ["boundary", "simulate"]


def simulate(case: Case, duration_s: float | None = None, *, purpose: Purpose = "release", points: int = 1201) -> Response:
    """Run a case, with its levers on it, after its disturbance.

    Parameters
    ----------
    case : Case
    duration_s : float, optional
        s; by default about ten cycles, in round figures.
    purpose : "release" or "drag"
        Exact to 1e-6, or fast to plotting accuracy.
    points : int
        How many equally spaced times.

    Returns
    -------
    Response
        `trace` with times in s, states, status, error estimate and apnoeas; `signals` with names, units and values.

    Raises
    ------
    InvalidInputError
        If the case allows no rest, or an argument breaks its rule.
    """
    judged = judge_loop(apply_levers(case))
    return respond(case, judged, run_length(judged) if duration_s is None else duration_s, purpose=purpose, points=points)


def boundary(case: Case) -> BoundaryMap:
    """The stability boundary of a case in the plane of sensitivity against delay, over the window that the page shows.

    Returns
    -------
    BoundaryMap
        `delays` in s and `critical`, the lowest sensitivity at which the loop hunts there (inf where none does), shape (n,).

    Raises
    ------
    InvalidInputError
        If the case allows no rest.
    """
    return map_of(case, window_of(case))
