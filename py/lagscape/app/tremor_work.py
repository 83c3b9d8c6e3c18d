"""What takes its time with a tremor: reading the axes and averaging their spectra. It shares the recording view's bar."""

from __future__ import annotations

from typing import TYPE_CHECKING

from lagscape.app.long_work import Work
from lagscape.errors import InvalidInputError, RecordingError
from lagscape.recordings.loading import loading_steps
from lagscape.recordings.tremor import TremorMeasurement, tremor_steps

if TYPE_CHECKING:
    from lagscape.app.tremor_view import TremorView

__all__ = ["TremorWork"]

_PARTS = {"signal": 0.5, "tools": 0.5, "measuring": 1.0}


class TremorWork:
    """The long work of one tremor view."""

    def __init__(self, view: TremorView) -> None:
        self.view = view

    async def measure(self, window: tuple[float, float] | None = None) -> None:
        """Measure the sensor in a window, by default in the first one."""
        view = self.view
        sensor = view.state.sensor
        if sensor is None:
            return
        before = view.state

        def undo() -> None:
            view.state = before
            view.draw()

        with view.view.work.place.begin(f"Measuring {sensor.name}", _PARTS, undo) as work:
            await self.measure_in(work, window)

    async def measure_in(self, work: Work, window: tuple[float, float] | None) -> None:
        """As a part of work that is under way, such as opening."""
        view = self.view
        signals, recording = view.signals(), view.view.recording
        assert recording is not None
        span = window or view.first_window()
        name = " + ".join(signal.name for signal in signals)
        measured: TremorMeasurement | None = None
        refusal = ""
        try:
            await work.through("signal", lambda _done, _total: f"reading {name}", loading_steps(*signals))
            await view.view.work.tools(work)
            steps = tremor_steps(recording, [signal.name for signal in signals], window=span, kind=view.state.kind)
            measured = await work.through("measuring", lambda _done, _total: "averaging the spectrum", steps)
        except (RecordingError, InvalidInputError) as problem:
            refusal = str(problem)[:1].upper() + str(problem)[1:] + ("" if str(problem).endswith(".") else ".")
        except ImportError as problem:
            refusal = str(problem)
        view.show_measured(measured, span, refusal)
