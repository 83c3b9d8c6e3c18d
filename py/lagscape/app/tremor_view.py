"""A tremor: its channels, the window to drag, the spectrum, two conditions with a load between them, and what they put on the case."""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import panel as pn

from lagscape.app.channel_words import sensor_named
from lagscape.app.components.sheet import Request, Sheet
from lagscape.app.palette import PALETTES
from lagscape.app.spectrum_figure import SpectrumFigure
from lagscape.app.tremor_strip import TremorStrip
from lagscape.app.tremor_words import tremor_head, tremor_side
from lagscape.app.tremor_work import TremorWork
from lagscape.case.case import Case
from lagscape.errors import InvalidInputError
from lagscape.questions.lay import Laying
from lagscape.questions.tremor_lay import lay_tremor
from lagscape.questions.tremor_load import Load
from lagscape.questions.tremor_study import TremorStudy, tremor_study
from lagscape.recordings import Recording
from lagscape.recordings.kinds import BREATHING_KINDS, TREMOR_KINDS
from lagscape.recordings.recording import Signal
from lagscape.recordings.tremor import TremorMeasurement
from lagscape.recordings.tremor_sensor import Sensor, sensors_in

if TYPE_CHECKING:
    from lagscape.app.recording_view import RecordingView

__all__ = ["Held", "TremorState", "TremorView"]

_WHOLE_UP_TO_S, _FIRST_WINDOW_S = 180.0, 60.0
_REST_S = 0.3
"""How long the window must rest before it is measured."""


@dataclass(frozen=True, eq=False)
class Held:
    """A measurement held as unloaded or loaded, and the file it is from, which the screen alone shows."""

    measured: TremorMeasurement
    file: str


@dataclass(frozen=True, eq=False)
class TremorState:
    """What the view holds; a stopped opening puts the one before back."""

    sensor: Sensor | None = None
    """None where the recording is read as breathing."""
    kind: str = "acceleration"
    current: TremorMeasurement | None = None
    unloaded: Held | None = None
    loaded: Held | None = None
    mass: str = ""
    mass_unit: str = "g"
    arm: str = ""
    load: Load | None = None
    start: str | None = None
    """Reflex starting case chosen to compare with, where the case is of another loop."""
    offers_start: bool = False
    laying: Laying | None = None
    refusal: str = ""
    """Beside what was refused: the window held, the load."""
    not_laid: str = ""
    """Why nothing can be laid, beside the button."""
    decibels: bool = False


class TremorView:
    """Shown by the recording view in place of the breathing where a channel is read as a tremor."""

    def __init__(self, view: RecordingView) -> None:
        self.view, self.bench = view, view.bench
        self.state = TremorState()
        self.work = TremorWork(self)
        self.built = False
        self._drawn: tuple[Signal, ...] = ()
        self._studied: tuple[Any, TremorStudy | None] | None = None
        self._moves = 0
        self._placing = False
        self._window: tuple[float, float] | None = None
        self._told: TremorStudy | None = None
        self.bench.listen("settled", self._case_changed)

    @property
    def is_on(self) -> bool:
        """Whether the recording is read as a tremor."""
        return self.state.sensor is not None

    @cached_property
    def root(self) -> Any:
        """The view, built with the recording view that shows it."""
        border: dict[str, Any] = {"min_border_left": 60, "min_border_right": 20, "toolbar_location": None, "sizing_mode": "stretch_width"}
        self.strip, self.spectrum = TremorStrip(border), SpectrumFigure(border)
        self.strip.shown.on_change("end", self._window_moved)
        self.strip.shown.on_change("start", self._window_moved)
        self.head, self.side = Sheet(self.handle), Sheet(self.handle)
        drawn = pn.Column(
            self.head,
            *(pn.pane.Bokeh(plot, sizing_mode="stretch_width") for plot in (self.strip.strip, self.spectrum.plot, self.strip.close)),
            styles={"flex": "3 1 480px", "min-width": "0", "width": "auto"},
        )
        self.side.styles = {"flex": "1 1 310px", "min-width": "0", "width": "auto"}
        self.built = True
        self.dress()
        return pn.FlexBox(drawn, self.side, gap="20px", align_items="flex-start", sizing_mode="stretch_width")

    def dress(self) -> None:
        if self.built:
            self.strip.dress(PALETTES[self.bench.theme])
            self.spectrum.dress(PALETTES[self.bench.theme])

    def take(self, recording: Recording) -> None:
        """A file was opened: its likeliest sensor is chosen if nothing in it looks like breathing; conditions held before stay."""
        sensor, self._window = None, None
        if not recording.of_kind(*BREATHING_KINDS):
            found = [item for kind in TREMOR_KINDS for item in sensors_in(recording) if item.kind == kind]
            single = recording.of_kind(*TREMOR_KINDS)[:1]
            sensor = found[0] if found else sensor_named(recording, single[0].name) if single else None
        self._choose(sensor, None if sensor is None else sensor.kind)

    def _choose(self, sensor: Sensor | None, kind: str | None) -> None:
        known = kind if kind in TREMOR_KINDS else "acceleration"
        self.state = replace(self.state, sensor=sensor, kind=known, current=None, laying=None, offers_start=False, refusal="", not_laid="")

    @property
    def chosen(self) -> str | None:
        """Name of the sensor that is shown."""
        return None if self.state.sensor is None else self.state.sensor.name

    def choose(self, name: str, read_as: str | None = None) -> bool:
        """Take a sensor or channel, read as what it is guessed to be or as `read_as`; False where it is breathing, which is not ours."""
        assert self.view.recording is not None
        sensor = sensor_named(self.view.recording, name)
        kind = read_as or sensor.kind
        if kind not in TREMOR_KINDS:
            self._choose(None, None)
            return False
        self._choose(sensor, kind)
        self.view.measurement = self.view.lag = self.view.laying = self.view.fit = None
        return True

    def signals(self) -> tuple[Signal, ...]:
        """The channels of the sensor that is shown."""
        if self.view.recording is None or self.state.sensor is None:
            return ()
        return tuple(self.view.recording.signal(name) for name in self.state.sensor.signals)

    def first_window(self) -> tuple[float, float]:
        """The one chosen before in this recording, else the whole of a short one, the first minute of a long one."""
        assert self.view.recording is not None
        if self._window is not None:
            return self._window
        segments = self.view.recording.segments
        start, stop = segments[0].start_s, segments[-1].stop_s
        return (start, stop) if stop - start <= _WHOLE_UP_TO_S else (start, start + _FIRST_WINDOW_S)

    def shown_window(self) -> tuple[float, float]:
        """Start and end of the window inside the recording, s."""
        start, stop = float(self.strip.shown.start), float(self.strip.shown.end)
        signals = self.signals()
        if not signals:
            return start, stop
        first, last = signals[0].segments[0].start_s, signals[0].segments[-1].stop_s
        return min(max(start, first), last), max(min(stop, last), first)

    def show_measured(self, measured: TremorMeasurement | None, window: tuple[float, float], refusal: str) -> None:
        """The window was measured, or refused with a sentence."""
        self.state = replace(self.state, current=measured, laying=None, refusal="", not_laid="")
        self.view.refusal = refusal
        self._moves += 1  # what moved before this is measured with it
        self.draw(window)

    def study(self) -> TremorStudy | None:
        """What is held, or the window alone; worked out once for what it follows from."""
        state, case = self.state, self.reflex_case()
        unloaded = state.unloaded.measured if state.unloaded is not None else state.current
        loaded = None if state.loaded is None else state.loaded.measured
        if unloaded is None:
            return None
        key = (unloaded, loaded, state.load, case if loaded is not None else None)
        if self._studied is None or self._studied[0] != key:
            self._studied = (key, tremor_study(unloaded, loaded, state.load, case))
        return self._studied[1]

    def reflex_case(self) -> Case | None:
        """The case where it is a reflex loop, else the starting case chosen to compare with."""
        if self.bench.case.kind == "reflex":
            return self.bench.case
        return None if self.state.start is None else Case.from_starting_case(self.state.start)

    def conditions(self) -> tuple[tuple[str, TremorMeasurement], ...]:
        """Role and measurement of everything that is shown: the window where it is held as neither, unloaded, loaded."""
        state = self.state
        held = [(role, item.measured) for role, item in (("unloaded", state.unloaded), ("loaded", state.loaded)) if item is not None]
        if state.current is not None and all(state.current is not one for _, one in held):
            held.insert(0, ("window", state.current))
        return tuple(held)

    def draw(self, window: tuple[float, float] | None = None) -> None:
        """Draw the channels, what was measured and the words."""
        _ = self.root
        window = window or (self.state.current.window if self.state.current is not None else None)
        # A channel that has not been measured may not have been read from its file yet.
        signals = self.signals() if window is not None else ()
        if signals != self._drawn:
            self._drawn = signals
            self.strip.draw(signals)
        if window is not None:
            self._placing, self._window = True, window
            self.strip.show_window(*window)
            self._placing = False
        self.strip.draw_masked(self.state.current)
        self.spectrum.draw(self.conditions(), self.state.decibels)
        self.write()

    def write(self) -> None:
        """Rewrite the words, and tell the handover where something else is measured."""
        if not self.built:
            return
        study = self.study() if self.is_on else None
        if self._told is not study:
            self._told = self.bench.tremor = study
            self.bench.tell("recording")
        self.head.show(tremor_head(self))
        self.side.show(tremor_side(self, study))

    def forget(self) -> None:
        """The recording is read as breathing: nothing of the tremor is handed over."""
        self._drawn = ()
        if self._told is not None:
            self._told = self.bench.tremor = None
            self.bench.tell("recording")

    def _case_changed(self) -> None:
        if not (self.built and self.is_on and self.view.recording is not None):
            return
        if self.state.laying is not None:
            self.state = replace(self.state, laying=None)
        self.bench.when_rested(self.write)

    def _window_moved(self, _attribute: str, _old: float, _new: float) -> None:
        """The window follows the hand; it is measured when the hand rests."""
        if self._placing:
            return
        self.strip.draw_close()
        self._window = self.shown_window()
        self._moves += 1
        moves = self._moves

        async def rested() -> None:
            await asyncio.sleep(_REST_S)
            if moves == self._moves and self.is_on:
                await self.work.measure(self.shown_window())

        self.bench.later(rested())

    def handle(self, request: Request) -> None:
        """What the hand did in the head or the side."""
        if request.act in ("channel", "read-as", "rate"):
            self.view.handle(request)
        elif request.act in _ACTS and request.event != "escape":
            _ACTS[request.act](self, request)

    def _set(self, **changes: Any) -> None:
        self.state = replace(self.state, **changes)
        self.spectrum.draw(self.conditions(), self.state.decibels)
        self.write()

    def _measure_whole(self, _request: Request) -> None:
        segments = self.signals()[0].segments
        self.view.work.place.start(self.work.measure((segments[0].start_s, segments[-1].stop_s)))

    def _set_edge(self, request: Request) -> None:
        start, stop = self.shown_window()
        segments = self.signals()[0].segments
        first, last = segments[0].start_s, segments[-1].stop_s
        try:
            value = _number(request.value, "The window's edge")
            start, stop = (value, stop) if request.key == "start" else (start, value)
            if not first <= start < stop <= last:
                raise InvalidInputError(f"The window must start before it ends, from {first:g} to {last:g} s; got {start:g} to {stop:g} s.")
        except InvalidInputError as problem:
            self.view.refusal = str(problem)
            self.write()
            return
        self.view.work.place.start(self.work.measure((start, stop)))

    def _hold(self, request: Request) -> None:
        assert self.view.recording is not None
        if self.state.current is not None:
            held = Held(self.state.current, self.view.recording.name)
            other = self.state.loaded if request.key == "unloaded" else self.state.unloaded
            if other is not None and other.file == held.file and _overlap(other.measured.window, held.measured.window):
                self._set(refusal=f"This window overlaps the one held as {'loaded' if request.key == 'unloaded' else 'unloaded'}. Move it first.")
            else:
                self._set(**{request.key: held}, laying=None, refusal="", not_laid="")

    def _release(self, _request: Request) -> None:
        self._set(unloaded=None, loaded=None, laying=None, refusal="", not_laid="")

    def _set_load(self, request: Request) -> None:
        typed = {"mass": self.state.mass, "mass-unit": self.state.mass_unit, "arm": self.state.arm, request.act: request.value.strip()}
        state = replace(self.state, mass=typed["mass"], mass_unit=typed["mass-unit"], arm=typed["arm"], load=None)
        state = replace(state, laying=None, refusal="", not_laid="")
        try:
            if state.mass and state.arm:
                mass = _number(state.mass, "The mass") * (1e-3 if state.mass_unit == "g" else 1.0)
                state = replace(state, load=Load(mass, 0.01 * _number(state.arm, "The lever arm")))
        except InvalidInputError as problem:
            state = replace(state, refusal=str(problem))
        self.state = state
        self.write()

    def _prepare(self, _request: Request) -> None:
        """List what laying would change; where the case is of another loop, offer a reflex case first."""
        case, study = self.reflex_case(), self.study()
        if study is None:
            return
        if case is None:
            self._set(offers_start=True, laying=None)
            return
        try:
            self._set(laying=lay_tremor(case, study.unloaded, study.answer), not_laid="", offers_start=False)
        except InvalidInputError as problem:
            self._set(laying=None, not_laid=str(problem), offers_start=False)

    def _start_from(self, request: Request) -> None:
        self.state = replace(self.state, start=request.key, offers_start=False)
        self._prepare(request)

    def _lay(self, _request: Request) -> None:
        laid = self.state.laying
        if laid is None:
            return
        self.state = replace(self.state, laying=None)
        self.bench.begin(laid.case)
        self.bench.page.send("show", {"view": "recording", "open": False})
        self.bench.page.send("say", {"place": "case", "text": "The measured numbers are on the case. Undo takes them off.", "tone": "note"})
        self.write()


def _overlap(one: tuple[float, float], other: tuple[float, float]) -> bool:
    return one[0] < other[1] and other[0] < one[1]


def _number(text: str, name: str) -> float:
    try:
        return float(text.strip().replace("−", "-").replace(",", "."))
    except ValueError:
        raise InvalidInputError(f"{name} must be a number; got {text.strip()[:30]!r}.") from None


_ACTS: dict[str, Callable[[TremorView, Request], None]] = {
    "measure-whole": TremorView._measure_whole,
    "edge": TremorView._set_edge,
    "hold": TremorView._hold,
    "release": TremorView._release,
    "mass": TremorView._set_load,
    "mass-unit": TremorView._set_load,
    "arm": TremorView._set_load,
    "decibels": lambda view, request: view._set(decibels=request.value == "true"),
    "prepare": TremorView._prepare,
    "start-from": TremorView._start_from,
    "compare-with": lambda view, request: view._set(start=request.key, laying=None),
    "cancel": lambda view, _request: view._set(laying=None, offers_start=False),
    "lay": TremorView._lay,
}
