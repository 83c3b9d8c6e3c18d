"""The literature behind the methods, so that a report names those it used and no other."""

from __future__ import annotations

from collections.abc import Mapping

from lagscape.case.case import Case
from lagscape.questions.standing import Analysis, Standing

__all__ = ["METHODS", "methods_used", "references"]

METHODS: Mapping[str, str] = {
    "margins": "Margins and crossovers of the open loop: Nyquist 1932, Bell Syst. Tech. J. 11, 126-147.",
    "roots": "Rightmost roots by a pseudospectral generator, polished by Newton: Breda, Maset and Vermiglio 2005, SIAM J. Sci. "
    "Comput. 27, 482-495.",
    "cycle": "The cycle of a hunting loop by harmonic balance: Mees 1981, Dynamics of Feedback Systems, Wiley.",
    "alveolar": "Alveolar ventilation equation: PACO2 = 863 VCO2 / VA + PICO2, with 863 mmHg = 760 x 310 / 273 (standard).",
    "hypoxia": "Hypoxic multiplier of the peripheral gain exp(-0.05 (PaO2 - 100)): known from secondary sources only.",
    "plain": "The plain loop: Mackey and Glass 1977, Science 197, 287-289.",
    "clonus": "Clonus as a hunting reflex loop that moves with the load: Rack, Ross and Thilmann 1984.",
    "duty_ratio": "Loop gain from the duty ratio, 2 pi / (2 pi DR - sin 2 pi DR): Sands et al. 2011, Am. J. Respir. Crit. Care Med. "
    "184, 1067.",
}
"""Method to the words of its reference."""


def methods_used(case: Case, analysis: Analysis, measured: bool = False) -> tuple[str, ...]:
    """The methods behind one report, in the order of METHODS.

    Parameters
    ----------
    case, analysis
        The case and what was said of it.
    measured : bool
        True where a recording's cycles stand in the report.
    """
    used = {"margins", "roots"}
    if analysis.standing is Standing.HUNTS and analysis.duty_ratio is not None:
        used.add("cycle")
    if case.kind == "breathing":
        used.add("alveolar")
        # At 100 mmHg the multiplier is 1: it had no part in the figures.
        if case.value("arterial_po2_mmhg") != 100.0:
            used.add("hypoxia")
    if case.kind == "plain":
        used.add("plain")
    if case.kind == "reflex":
        used.add("clonus")
    if measured:
        used.add("duty_ratio")
    return tuple(name for name in METHODS if name in used)


def references(case: Case, analysis: Analysis, measured: bool = False, further: tuple[str, ...] = ()) -> tuple[str, ...]:
    """The lines of a report's reference list: methods first, then `further` ones of levers, none twice."""
    lines = [METHODS[name] for name in methods_used(case, analysis, measured)]
    return tuple(dict.fromkeys([*lines, *further]))
