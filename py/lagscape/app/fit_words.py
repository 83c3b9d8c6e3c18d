"""The fit's words in the recording view: what the recording says of the loop, how well it is met, and what stays as it was."""

from __future__ import annotations

from html import escape

from lagscape.quantities import figure, to_display
from lagscape.questions.fit import Fit, FitStatus, FittedFigure, FittedNumber

__all__ = ["fit_html"]


def fit_html(fit: Fit, pressure_unit: str) -> str:
    """HTML of a fit, with the button that takes its loop as the case."""
    sentences = "".join(f"<li>{escape(sentence)}</li>" for sentence in fit.sentences)
    warning = f'<p class="caution">{escape(fit.warning)}</p>' if fit.warning else ""
    if fit.status is FitStatus.NOT_FITTED:
        return f'<section class="laying" aria-label="Fit"><h3>No loop fits</h3><ul>{sentences}</ul>{_tools(False)}</section>'
    misfits = "".join(
        f'<tr><th scope="row">{escape(one.label)}</th><td>{figure(one.measured)} {escape(one.unit)}</td><td>{figure(one.fitted)}</td>'
        f"<td>{figure(one.standard_errors, 2)}</td></tr>"
        for one in fit.misfits
    )
    numbers = []
    answers: tuple[FittedNumber | FittedFigure, ...] = (*fit.numbers, *fit.figures)
    for item in answers:
        factor, unit = to_display(1.0, item.unit, pressure_unit)
        before, after = item.prior, item.posterior
        said = "pinned" if item.pinned else "as it was"
        numbers.append(
            f'<tr><th scope="row">{escape(item.label)} <span class="quiet">{escape(unit)}</span></th>'
            f"<td>{figure(before.low * factor, 2)} to {figure(before.high * factor, 2)}</td>"
            f"<td><b>{figure(after.low * factor, 2)} to {figure(after.high * factor, 2)}</b></td><td>{said}</td></tr>"
        )
    return (
        f'<section class="laying" aria-label="Fit"><h3>The most plausible loop</h3><ul>{sentences}</ul>{warning}{_tools(True)}'
        f'<table class="cycles"><thead><tr><th></th><th>measured</th><th>fitted</th><th>off by, standard errors</th></tr></thead><tbody>{misfits}'
        "</tbody></table><h3>90 % intervals, before and after the recording</h3>"
        f'<table class="cycles"><thead><tr><th></th><th>before</th><th>after</th><th></th></tr></thead><tbody>{"".join(numbers)}</tbody></table>'
        f'<p class="quiet">Seed {fit.seed}. The fitted loop\'s ventilation is the broken line over the recording.</p></section>'
    )


def _tools(fitted: bool) -> str:
    take = '<button class="main" data-act="take-fit">Take this loop as the case</button>' if fitted else ""
    return f'<div class="tools">{take}<button data-act="drop-fit">Leave the case as it is</button></div>'
