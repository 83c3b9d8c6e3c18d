"""The right column's upper half: the verdict in one sentence, the figures that support it, and how far the boundary is."""

from __future__ import annotations

import math
from html import escape

from lagscape.app.components.sheet import Sheet
from lagscape.app.workbench import Workbench
from lagscape.case.plausibility import implausible
from lagscape.quantities import figure, quantity
from lagscape.questions.beginning import beginning_of
from lagscape.questions.standing import Analysis, Judgement, analysis_of
from lagscape.questions.wording import cycle_words, distance_sentence, seconds_words, standing_sentence

__all__ = ["StandingView"]

class StandingView:
    """Draws the standing. While the case moves only its first word and the loop gain follow."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.root = Sheet()
        bench.listen("moving", self.follow)
        bench.listen("settled", self.draw)
        bench.listen("units", self.draw)
        self.draw()

    def follow(self) -> None:
        judged = self.bench.judged.judgement
        text = f"{judged.standing.capitalize()}. Loop gain {figure(judged.margins.loop_gain, 2)}."
        self.bench.page.send("standing", {"text": text, "state": str(judged.standing)})

    def draw(self) -> None:
        judged = self.bench.judged.judgement
        analysis = analysis_of(judged, standing_sentence(judged))
        changed = self.bench.judged.with_levers
        after = ""
        if changed is not None:
            after = f'<p class="after-levers"><b>With levers:</b> {escape(standing_sentence(changed))}</p>'
        figures = self._figures(analysis, judged)
        self._show(judged, analysis.sentence, distance_sentence(judged), figures, after)

        def add_beginning() -> None:
            words = f'<p class="beginning">{escape(beginning_of(judged).sentence)}</p>'
            self._show(judged, analysis.sentence, distance_sentence(judged), figures, after, words)

        self.bench.when_rested(add_beginning)

    def _show(self, judged: Judgement, sentence: str, distance: str, figures: str, after: str, beginning: str = "") -> None:
        standing = judged.standing
        refusal = self.bench.refusals.get("map")
        said = f'<p class="refusal" role="alert">{escape(refusal)}</p>' if refusal else ""
        unlikely = "".join(f'<p class="caution">{escape(words)}</p>' for words in implausible(judged.loop)) if judged.loop.kind == "breathing" else ""
        self.bench.page.send("standing", {"text": sentence, "state": str(standing)})
        self.root.show(f'<div class="support"><p class="distance">{escape(distance)}</p>{said}{after}{figures}{beginning}{unlikely}</div>')

    def _figures(self, analysis: Analysis, judged: Judgement) -> str:
        units = self.bench.units
        rows: list[tuple[str, str, str]] = []

        def add(label: str, value: str, key: str, meaning: str) -> None:
            rows.append((label, value if value != "–" else "none", analysis.reasons.get(key, meaning)))

        add("Loop gain", figure(analysis.loop_gain), "loop_gain", "Above 1 the loop hunts. Taken where the answer comes back upside down.")
        add("Gain margin", _gain_words(analysis.gain_margin), "gain_margin", "The factor on sensitivity that brings the loop to the boundary.")
        phase = analysis.phase_margin_rad
        add(
            "Phase margin", "–" if phase is None else f"{figure(math.degrees(phase))}°", "phase_margin_rad",
            "The lag that brings the loop to the boundary; negative: the lead it needs.",
        )  # fmt: skip
        delay = analysis.delay_margin_s
        words = "–" if delay is None else f"{figure(delay)} s" if abs(delay) >= 1.0 else f"{figure(1000.0 * delay)} ms"
        add("Delay margin", words, "delay_margin_s", "The delay that brings the loop to the boundary; negative: what must be taken away.")
        if analysis.cycle_length_s is not None:
            add("Cycle length" if analysis.cycle_length_s >= 1.0 else "Beat", cycle_words(judged), "cycle_length_s", "")
        if analysis.kind == "breathing":
            add("Duty ratio", figure(analysis.duty_ratio), "duty_ratio", "The share of each cycle with breathing.")
            apnoea = analysis.apnoea_s
            add("Apnoea in each cycle", "–" if apnoea is None else seconds_words(apnoea) if apnoea > 0.0 else "0 s", "apnoea_s", "")
            add(
                "CO2 reserve", quantity(analysis.co2_reserve_mmhg, "mmHg", units), "co2_reserve_mmhg",
                "Resting PaCO2 less the apnoeic threshold.",
            )  # fmt: skip
            add("Resting PaCO2", quantity(analysis.equilibrium["PaCO2"], "mmHg", units), "", "Where steady breathing stands.")
            add("Resting ventilation", f"{figure(analysis.equilibrium['controlled signal'])} L/min", "", "From the alveolar ventilation equation.")
        growth, length = analysis.growth_rate_per_s, judged.linear_cycle_length
        if growth is not None and length is not None:
            change = math.exp(min(growth * length, 50.0))
            what = "A small swing grows" if change > 1.0 else "A small swing shrinks"
            rows.append((f"{what} each cycle to", f"{figure(100.0 * change)} %", "From the dominant oscillatory root."))
        body = "".join(
            f'<tr title="{escape(meaning)}"><th scope="row">{escape(label)}</th><td>{escape(value)}</td></tr>' for label, value, meaning in rows
        )
        return f'<table class="figures">{body}</table>'


def _gain_words(margin: float | None) -> str:
    if margin is None:
        return "–"
    return f"{figure(margin)} ({figure(20.0 * math.log10(margin), 2)} dB)"
