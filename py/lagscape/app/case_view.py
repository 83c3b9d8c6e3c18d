"""The left column: which loop, which starting case, and every number with its unit, typical band, slider and basis."""

from __future__ import annotations

import math
from html import escape
from time import monotonic

from lagscape.app.clinic_entries import ENTRIES, Field, apply_entry
from lagscape.app.components.sheet import Request, Sheet
from lagscape.app.workbench import Workbench
from lagscape.case.case import Case, starting_case
from lagscape.case.parameters import Basis, ParameterSpecification
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS
from lagscape.quantities import figure, from_display, quantity, to_display

__all__ = ["CaseView"]

_SLIDER_STEPS = 400
_FOLLOW_EVERY_S = 0.3
_DISCS = {Basis.MEASURED: "●", Basis.ASSUMED: "◐", Basis.TYPICAL: "○"}


class CaseView:
    """Draws the case's numbers and takes changes from boxes, sliders and discs."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.opened: str | None = None
        self.typed: dict[str, str] = {}
        self.said: dict[str, str] = {}
        self.root = Sheet(self._handle)
        self._drawn_at = 0.0
        bench.listen("settled", self.draw)
        bench.listen("units", self.draw)
        bench.listen("moving", self.follow)
        self.draw()

    def follow(self) -> None:
        """While the hand moves the numbers that move follow a few times a second: the dot and the traces go first."""
        if monotonic() - self._drawn_at < _FOLLOW_EVERY_S:
            return
        self._drawn_at = monotonic()
        now, before, items = self.bench.case, self.bench.history.present, self.bench.case.specifications
        moved = [name for name in items if name in self.root.adjusted or now.value(name) != before.value(name)]
        self.root.adjust({name: {"number": self._text(now, items[name]), "slide": str(_position(items[name], now.value(name)))} for name in moved})

    def draw(self) -> None:
        case = self.bench.case
        self._drawn_at = monotonic()
        parts = [self._head(case)]
        groups: dict[str, list[ParameterSpecification]] = {}
        for specification in case.specifications.values():
            groups.setdefault(specification.group, []).append(specification)
        for group, members in groups.items():
            rows = "".join(self._row(case, item) for item in members)
            title = group[:1].upper() + group[1:]
            parts.append(f'<section class="group"><h3>{escape(title)}</h3>{rows}</section>')
        parts.append(self._choices(case))
        self.root.show("".join(parts))

    def _head(self, case: Case) -> str:
        bench = self.bench
        loops = "".join(
            f'<option value="{kind}"{" selected" if kind == case.kind else ""}>{escape(loop.title)}</option>' for kind, loop in LOOPS.items()
        )
        cases = "".join(
            f'<option value="{item.name}"{" selected" if item.name == case.started_from else ""}>{escape(item.title)}</option>'
            for item in LOOPS[case.kind].starting_cases
        )
        typical = f'<option value=""{" selected" if case.started_from is None else ""}>Typical numbers</option>'
        about = starting_case(case.started_from)[1].about if case.started_from else "Every number typical for an adult."
        same = "" if case != self.bench.start.case else " disabled"
        undo = "" if bench.history.can_undo else " disabled"
        redo = "" if bench.history.can_redo else " disabled"
        refusal = self._refusal("")
        return (
            '<div class="head"><h2>The case</h2>'
            f'<label class="pick"><span>Loop</span><select data-act="loop" aria-label="Loop">{loops}</select></label>'
            f'<label class="pick"><span>Starting case</span><select data-act="start" aria-label="Starting case">{cases}{typical}</select></label>'
            f'<p class="about">{escape(about)}</p>'
            '<div class="tools">'
            f'<button data-act="undo"{undo} title="Undo (Ctrl Z)">Undo</button>'
            f'<button data-act="redo"{redo} title="Redo (Ctrl Y)">Redo</button>'
            f'<button data-act="back"{same}>Back to start</button></div>{refusal}</div>'
            '<p class="key"><span aria-hidden="true">●</span> measured <span aria-hidden="true">◐</span> assumed '
            '<span aria-hidden="true">○</span> typical <i class="band-key"></i> typical band</p>'
        )

    def _row(self, case: Case, item: ParameterSpecification) -> str:
        number = case.numbers[item.name]
        shown, unit = to_display(number.value, item.unit, self.bench.units)
        position = _position(item, number.value)
        low, high = _position(item, item.typical_low), _position(item, item.typical_high)
        start = _position(item, self.bench.start.case.value(item.name)) if case.started_from else position
        open_ = self.opened == item.name
        refusal = self._refusal(item.name)
        label, name = escape(item.label), item.name
        text = self._text(case, item)
        invalid = ' aria-invalid="true"' if refusal else ""
        more = self._more(case, item) if open_ else ""
        return (
            f'<div class="row{" refused" if refusal else ""}">'
            f'<button class="name" data-act="open" data-key="{name}" aria-expanded="{str(open_).lower()}">{label}</button>'
            f'<input class="box" type="text" inputmode="decimal" autocomplete="off" aria-label="{label}, {escape(unit)}" data-act="number"'
            f' data-key="{name}" value="{text}"{invalid}><span class="unit">{_breakable(unit)}</span>'
            f'<input class="slide" type="range" min="0" max="{_SLIDER_STEPS}" step="1" data-act="slide" data-live data-key="{name}"'
            f' value="{position}" aria-label="{label} slider" aria-valuetext="{escape(figure(shown))} {escape(unit)}"'
            f' style="--low:{low / _SLIDER_STEPS:.4f};--high:{high / _SLIDER_STEPS:.4f};--start:{start / _SLIDER_STEPS:.4f}">'
            f'<button class="disc" data-act="basis" data-key="{name}" title="{number.basis}: press to change"'
            f' aria-label="Basis of {label}: {number.basis}">{_DISCS[number.basis]}</button>{refusal}</div>{more}'
        )

    def _text(self, case: Case, item: ParameterSpecification) -> str:
        """What stands in the number's box."""
        return figure(to_display(case.value(item.name), item.unit, self.bench.units)[0]).replace("−", "-")

    def _more(self, case: Case, item: ParameterSpecification) -> str:
        units = self.bench.units
        band = f"{quantity(item.typical_low, '', units)} to {quantity(item.typical_high, '', units)}"
        if "mmHg" in item.unit:
            low, unit = to_display(item.typical_low, item.unit, units)
            high, _ = to_display(item.typical_high, item.unit, units)
            band = f"{figure(low)} to {figure(high)} {unit}"
        elif item.unit:
            band += f" {item.unit}"
        low, unit = to_display(item.minimum, item.unit, units)
        high, _ = to_display(item.maximum, item.unit, units)
        spread = case.spread(item.name)
        if item.distribution == "lognormal":
            said = f"one standard deviation is a factor of {figure(math.exp(spread))}"
        else:
            said = f"one standard deviation is {quantity(spread, item.unit, units)}"
        return (
            f'<div class="more"><p>{escape(item.meaning)}</p><dl>'
            f"<dt>Symbol</dt><dd>{escape(item.symbol)}</dd><dt>Taken</dt><dd>{figure(low)} to {figure(high)} {escape(unit)}</dd>"
            f"<dt>Typical</dt><dd>{escape(band)}</dd><dt>Spread</dt><dd>{escape(said)} ({case.numbers[item.name].basis})</dd>"
            f"<dt>Source</dt><dd>{escape(item.source)}</dd></dl>{self._entries(case, item)}</div>"
        )

    def _entries(self, case: Case, item: ParameterSpecification) -> str:
        """The forms that turn what the clinic has into this number."""
        if case.kind != "breathing":
            return ""
        forms = []
        for number, entry in enumerate(ENTRIES.get(item.name, ())):
            boxes = "".join(self._field(f"{item.name}/{number}/{place}", field) for place, field in enumerate(entry.fields))
            forms.append(
                f'<div class="entry"><b>{escape(entry.label)}</b>{boxes}'
                f'<button data-act="apply" data-key="{item.name}/{number}">Use it</button></div>'
            )
        said = self.said.get(item.name)
        note = f'<p class="quiet" role="status">{escape(said)}</p>' if said else ""
        return "".join(forms) + note

    def _field(self, key: str, field: Field) -> str:
        text = self.typed.get(key, field.first)
        label = escape(field.label)
        if field.options:
            options = "".join(f"<option{' selected' if option == text else ''}>{escape(option)}</option>" for option in field.options)
            return f'<label>{label} <select data-act="entry" data-key="{key}">{options}</select></label>'
        unit = to_display(1.0, field.unit, self.bench.units)[1]
        return (
            f'<label>{label} <input class="box short" type="text" inputmode="decimal" autocomplete="off" data-act="entry" data-key="{key}"'
            f' value="{escape(text)}" aria-label="{label}, {escape(unit)}"> {escape(unit)}</label>'
        )

    def _choices(self, case: Case) -> str:
        rows = []
        for choice in LOOPS[case.kind].choices:
            options = "".join(
                f'<option value="{value}"{" selected" if case.choices[choice.name] == value else ""}>{escape(words)}</option>'
                for value, words in choice.options.items()
            )
            rows.append(
                f'<label class="pick" title="{escape(choice.meaning)}"><span>{escape(choice.label)}</span>'
                f'<select data-act="choice" data-key="{choice.name}">{options}</select></label>{self._refusal(choice.name)}'
            )
        return f'<section class="group"><h3>Form of the loop</h3>{"".join(rows)}</section>' if rows else ""

    def _refusal(self, place: str) -> str:
        sentence = self.bench.refusals.get(place)
        return f'<p class="refusal" role="alert">{escape(sentence)}</p>' if sentence else ""

    def _handle(self, request: Request) -> None:
        bench, case, key = self.bench, self.bench.case, request.key
        if request.act == "slide":
            item = case.specifications[key]
            value = _value(item, float(request.value))
            bench.attempt(key, lambda: case.with_number(key, value), moving=request.live)
        elif request.act == "number":
            if request.event == "escape":
                bench.refusals.pop(key, None)
                self.draw()
            elif request.value.replace("-", "−") != self._shown(key):
                bench.attempt(key, lambda: case.with_number(key, self._typed(key, request.value)))
        elif request.act == "basis":
            order = list(Basis)
            number = case.numbers[key]
            basis = order[(order.index(number.basis) + 1) % len(order)]
            bench.attempt(key, lambda: case.with_number(key, number.value, basis))
        elif request.act == "open":
            self.opened = None if self.opened == key else key
            self.draw()
        elif request.act == "entry":
            if request.event != "escape":
                self.typed[key] = request.value
        elif request.act == "apply":
            self._apply(*key.split("/"))
        elif request.act == "choice":
            bench.attempt(key, lambda: case.with_choice(key, request.value))
        elif request.act == "loop":
            self.said.clear()
            bench.begin(Case.from_starting_case(LOOPS[request.value].starting_cases[0].name))
        elif request.act == "start":
            bench.begin(Case.from_starting_case(request.value) if request.value else Case.typical(case.kind))
        elif request.act == "back":
            bench.begin(case.start())
        elif request.act == "undo":
            bench.undo()
        elif request.act == "redo":
            bench.redo()

    def _apply(self, name: str, number: str) -> None:
        entry = ENTRIES[name][int(number)]
        typed = tuple(self.typed.get(f"{name}/{number}/{place}", field.first) for place, field in enumerate(entry.fields))

        def change() -> Case:
            case, self.said[name] = apply_entry(self.bench.case, entry, typed, self.bench.units)
            return case

        self.said.pop(name, None)
        self.bench.attempt(name, change)

    def _shown(self, key: str) -> str:
        item = self.bench.case.specifications[key]
        return figure(to_display(self.bench.case.value(key), item.unit, self.bench.units)[0])

    def _typed(self, key: str, text: str) -> float:
        item = self.bench.case.specifications[key]
        plain = text.strip().replace("−", "-").replace(",", ".")
        try:
            number = float(plain)
        except ValueError:
            raise InvalidInputError(f"{item.label} must be a number; got {text.strip()[:40]!r}. Type it again or press Escape.") from None
        return from_display(number, item.unit, self.bench.units)


def _breakable(unit: str) -> str:
    """A unit that may wrap after a solidus."""
    return escape(unit).replace("/", "/<wbr>")


def _is_logarithmic(item: ParameterSpecification) -> bool:
    return item.minimum > 0.0 and item.maximum / item.minimum > 15.0


def _position(item: ParameterSpecification, value: float) -> int:
    """Where a value stands on its slider, in steps; logarithmic where the range spans more than a decade."""
    if _is_logarithmic(item):
        share = math.log(value / item.minimum) / math.log(item.maximum / item.minimum)
    else:
        share = (value - item.minimum) / (item.maximum - item.minimum)
    return round(_SLIDER_STEPS * min(1.0, max(0.0, share)))


def _value(item: ParameterSpecification, position: float) -> float:
    """The value at a slider position, rounded to what a step can tell apart."""
    share = min(1.0, max(0.0, position / _SLIDER_STEPS))
    if _is_logarithmic(item):
        value = item.minimum * (item.maximum / item.minimum) ** share
    else:
        value = item.minimum + share * (item.maximum - item.minimum)
    return min(item.maximum, max(item.minimum, float(f"{value:.4g}")))
