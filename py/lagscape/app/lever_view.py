"""The right column's levers: a switch, a dose, what it does to the margin, its rule, its source and its caution."""

from __future__ import annotations

from collections.abc import Mapping
from html import escape

from lagscape.app.components.sheet import Request, Sheet
from lagscape.app.workbench import Workbench
from lagscape.case.case import Case
from lagscape.case.parts import LeverSetting
from lagscape.errors import InvalidInputError
from lagscape.quantities import figure
from lagscape.questions.cautions import cautions
from lagscape.questions.enough import SAFE_GAIN_MARGIN, DoseAnswer, checked_margin, smallest_doses
from lagscape.questions.lever import Lever
from lagscape.questions.levers import LEVERS, LeverEffect
from lagscape.questions.pair import smallest_pair
from lagscape.questions.wording import seconds_words

__all__ = ["LeverView", "effect_words"]

_STEPS = 200


class LeverView:
    """Draws the levers of the case's loop and lays them on it."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.opened: str | None = None
        self.wanted = SAFE_GAIN_MARGIN
        self.answers: Mapping[str, DoseAnswer] = {}
        self.pair = ""
        self._answered_for: Case | None = None
        self.root = Sheet(self._handle)
        for topic in ("settled", "units"):
            bench.listen(topic, self.draw)
        self.draw()

    def draw(self) -> None:
        case = self.bench.case
        known = LEVERS.get(case.kind, {})
        if not known:
            self.root.show("")
            return
        doses = {setting.name: setting.dose for setting in case.levers}
        found = self.bench.judged.effects
        alone = {effect.settings[0].name: effect for effect in found if len(effect.settings) == 1}
        together = next((effect for effect in found if len(effect.settings) > 1), None)
        rows = "".join(self._row(lever, doses.get(name), alone.get(name)) for name, lever in known.items())
        said = "".join(f'<p class="caution">{escape(item.sentence)} <span class="quiet">{escape(item.source)}</span></p>' for item in cautions(case))
        all_on = f'<p class="after-levers"><b>All together:</b> {escape(effect_words(together))}</p>' if together is not None else ""
        if self._answered_for is not case:
            self.answers, self.pair = {}, ""
        clear = '<div class="tools"><button data-act="clear">Take all levers off</button></div>' if doses else ""
        self.root.show(f"<h3>What would quiet it</h3>{rows}{all_on}{clear}{self._ask()}{said}")

    def _ask(self) -> str:
        """The question for the dose that is enough, and the pair's answer."""
        refusal = self.bench.refusals.get("enough")
        wrong = f'<p class="refusal" role="alert">{escape(refusal)}</p>' if refusal else ""
        pair = f'<p class="after-levers">{escape(self.pair)}</p>' if self.pair else ""
        return (
            '<div class="tools"><button class="main" data-act="enough">Find the dose that is enough</button>'
            f'<label class="quiet">for a gain margin of <input class="box short" type="text" inputmode="decimal" data-act="wanted" '
            f'value="{figure(self.wanted)}" aria-label="Gain margin wanted"></label></div>{wrong}{pair}'
        )

    def _row(self, lever: Lever, dose: float | None, effect: LeverEffect | None) -> str:
        on, name, label = dose is not None, lever.name, escape(lever.label)
        shown = lever.start_dose if dose is None else dose
        place = f"lever-{name}"
        refusal = self.bench.refusals.get(place)
        said = f'<p class="refusal" role="alert">{escape(refusal)}</p>' if refusal else ""
        position = round(_STEPS * (shown - lever.minimum) / (lever.maximum - lever.minimum))
        slide = (
            f'<input class="slide" type="range" min="0" max="{_STEPS}" value="{position}" data-act="slide" data-live data-key="{name}"'
            f' aria-label="Dose of {label}" aria-valuetext="{figure(shown)} {escape(lever.unit)}">'
            if on
            else ""
        )
        words = f'<p class="effect">{escape(effect_words(effect))}</p>' if effect is not None else ""
        answer = self.answers.get(name)
        if answer is not None:
            take = ""
            if answer.in_steps is not None and answer.in_steps != dose:
                take = f' <button class="link" data-act="take" data-key="{name}">Lay {figure(answer.in_steps)} {escape(lever.unit)}</button>'
            words += f'<p class="enough">{escape(answer.sentence)}{take}</p>'
        more = ""
        if self.opened == name:
            more = (
                f'<div class="more"><p>Moves {escape(lever.moves)}</p><p>{escape(lever.rule)}</p><p>Published: {escape(lever.effect)} '
                f'<span class="quiet">{escape(lever.source)}</span></p></div>'
            )
        caution = f'<p class="caution">{escape(lever.caution)}</p>' if (on or self.opened == name) and lever.caution else ""
        checked = " checked" if on else ""
        return (
            f'<div class="lever"><input type="checkbox" data-act="switch" data-key="{name}" aria-label="{label}"{checked}>'
            f'<button class="name" data-act="open" data-key="{name}" aria-expanded="{str(self.opened == name).lower()}"'
            f' title="{escape(lever.caution)}">{label}</button>'
            f'<input class="box" type="text" inputmode="decimal" data-act="dose" data-key="{name}" value="{figure(shown).replace("−", "-")}"'
            f' aria-label="Dose of {label}, {escape(lever.unit)}"><span class="unit">{escape(lever.unit)}</span>{slide}{words}{said}</div>'
            f"{more}{caution}"
        )

    def _handle(self, request: Request) -> None:
        bench, key = self.bench, request.key
        place = f"lever-{key}"
        if request.act == "open":
            self.opened = None if self.opened == key else key
            self.draw()
        elif request.act == "clear":
            bench.attempt("", lambda: bench.case.with_levers())
        elif request.act == "switch":
            lever = LEVERS[bench.case.kind][key]
            dose = lever.start_dose if request.value == "true" else None
            bench.attempt(place, lambda: self._with(key, dose))
        elif request.act == "slide":
            lever = LEVERS[bench.case.kind][key]
            dose = lever.minimum + float(request.value) / _STEPS * (lever.maximum - lever.minimum)
            dose = min(lever.maximum, max(lever.minimum, lever.step * round(dose / lever.step)))
            bench.attempt(place, lambda: self._with(key, dose), moving=request.live)
        elif request.act == "wanted" and request.event != "escape":
            self._want(request.value)
        elif request.act == "enough":
            self._find()
        elif request.act == "take" and self.answers[key].in_steps is not None:
            dose = self.answers[key].in_steps
            bench.attempt(place, lambda: self._with(key, dose))
        elif request.act == "dose" and request.event != "escape":
            bench.attempt(place, lambda: self._with(key, self._typed(key, request.value)))

    def _want(self, text: str) -> None:
        try:
            self.wanted = checked_margin(float(text.strip().replace(",", ".")))
        except (ValueError, InvalidInputError):
            self.bench.refuse("enough", f"The gain margin wanted must be a positive number, such as 1.3; got {text.strip()[:30]!r}.")
            return
        self.bench.refusals.pop("enough", None)
        self.answers, self.pair = {}, ""
        self.draw()

    def _find(self) -> None:
        """The smallest dose of each lever; where none is enough alone, the smallest pair."""
        case = self.bench.case
        self.answers = smallest_doses(case, self.wanted)
        alone = any(answer.dose is not None for answer in self.answers.values())
        self.pair = "" if alone else smallest_pair(case, self.wanted).sentence
        self._answered_for = case
        self.draw()

    def _typed(self, key: str, text: str) -> float:
        lever = LEVERS[self.bench.case.kind][key]
        try:
            dose = float(text.strip().replace(",", ".").replace("−", "-"))
        except ValueError:
            raise InvalidInputError(f"The dose of {lever.label} must be a number in {lever.unit}; got {text.strip()[:30]!r}.") from None
        return lever.check(dose)

    def _with(self, name: str, dose: float | None) -> Case:
        """The case with this lever at this dose, the others as they are; None takes it off."""
        case = self.bench.case
        kept = [setting for setting in case.levers if setting.name != name]
        if dose is None:
            return case.with_levers(*kept)
        settings = {setting.name: setting for setting in case.levers} | {name: LeverSetting(name, dose)}
        return case.with_levers(*settings.values())


def effect_words(effect: LeverEffect) -> str:
    """What a lever does: loop gain, gain margin, cycle length, apnoea, before and after."""
    before, after = effect.before, effect.after
    if after is None:
        return effect.refusal
    parts = [f"{after.standing.capitalize()}"]
    parts.append(f"loop gain {figure(before.loop_gain, 2)} → {figure(after.loop_gain, 2)}")
    parts.append(f"gain margin {figure(before.gain_margin, 2)} → {figure(after.gain_margin, 2)}")
    if before.cycle_length_s is not None and after.cycle_length_s is not None:
        parts.append(f"cycle {seconds_words(before.cycle_length_s)} → {seconds_words(after.cycle_length_s)}")
    if before.apnoea_s is not None and after.apnoea_s is not None and before.apnoea_s != after.apnoea_s:
        parts.append(f"apnoea {figure(before.apnoea_s, 2)} → {figure(after.apnoea_s, 2)} s a cycle")
    return "; ".join(parts) + "."
