"""What takes its time with a recording: opening, reading a channel, measuring, fitting. Each shows how far it is and can be stopped."""

from __future__ import annotations

from pathlib import PurePath
from typing import TYPE_CHECKING, Any

import numpy as np

from lagscape.app.channel_words import sensor_named
from lagscape.app.long_work import LongWork, Work, WorkStopped
from lagscape.app.scipy_loader import begin_fetching, fetch_scipy, scipy_is_ready, scipy_steps
from lagscape.errors import InvalidInputError, RecordingError
from lagscape.questions.fit import fit_steps
from lagscape.questions.fit_measured import Measured, measured_from
from lagscape.questions.fit_ring_down import ring_down_after_events, ring_down_from_variability
from lagscape.recordings import BreathingMeasurement, Signal, Thresholds, measure_saturation_lag, with_derived_channels
from lagscape.recordings.breathing import breathing_steps
from lagscape.recordings.edf_header import FIXED_BYTES, looks_like_edf
from lagscape.recordings.loading import loading_steps
from lagscape.recordings.reading import recording_steps
from lagscape.recordings.saturation_lag import SaturationLag

if TYPE_CHECKING:
    from lagscape.app.recording_view import RecordingView

__all__ = ["READABLE_KINDS", "RecordingWork"]

READABLE_KINDS = ("ventilation", "airflow", "effort")
_SIGH = 2.0
"""A breath this many times the usual one is taken for a sigh (common practice, no source)."""
_KEPT = ("recording", "signal", "measurement", "lag", "laying", "fit", "ring_down", "refusal", "thresholds", "waiting", "tremor_state")
"""What the view holds and a stopped opening gives back."""
_EDF_BYTES_A_S, _TEXT_BYTES_A_S = 150e6, 6e6
_TOOLS_S, _MEASURING_S, _FITTING_S = 3.0, 3.0, 2.0
"""How long the parts are likely to take in a browser, as seen on one machine: weights of the bar, which do not have to be right."""


class RecordingWork:
    """The long work of one recording view."""

    def __init__(self, view: RecordingView) -> None:
        self.view = view
        self.place = LongWork(view.bench.page)

    async def open(self, file: Any, name: str, rate: float | None = None) -> None:
        """Read a file, show its channels, and measure the likeliest. A refused or stopped one leaves what was there."""
        view = self.view
        self.place.stop()
        size, is_edf = _kind_of(file)
        parts = {
            "file": 0.2 if is_edf else size / _TEXT_BYTES_A_S, "signal": size / _EDF_BYTES_A_S if is_edf else 0.0,
            "tools": _tools_s(), "measuring": _MEASURING_S,
        }  # fmt: skip
        before = {item: getattr(view, item) for item in _KEPT}

        def undo() -> None:
            for item, held in before.items():
                setattr(view, item, held)
            view.draw_signal()

        with self.place.begin(f"Opening {PurePath(name).name}", parts, undo) as work:
            try:
                recording = await work.through("file", _bytes("reading the file"), recording_steps(file, name=name, sampling_frequency_hz=rate))
            except RecordingError as problem:
                view.waiting = (file, name)
                view.refuse(str(problem))
                return
            view.take(with_derived_channels(recording))
            # The channels are on the screen before the reading and measuring of one, which may take seconds, begins.
            await work.answer_page(now=True)
            begin_fetching()
            if view.tremor.is_on:
                await view.tremor.work.measure_in(work, None)
            else:
                await self._read_and_measure(work, view.likeliest(), None)

    async def choose(self, name: str, read_as: str | None = None) -> None:
        """Read another channel, or the axes of a sensor, and measure it as what it is or is said to be."""
        view = self.view
        assert view.recording is not None
        held = view.tremor_state
        if view.tremor.choose(name, read_as):
            view.draw_signal()
            await view.tremor.work.measure()
            return
        signal, before = view.recording.signal(sensor_named(view.recording, name).signals[0]), view.drawn or view.signal

        def undo() -> None:
            view.signal, view.tremor_state = before, held
            view.write()

        parts = {"signal": 2.0 * signal.n_samples / _EDF_BYTES_A_S * len(view.recording.signals), "tools": _tools_s(), "measuring": _MEASURING_S}
        with self.place.begin(f"Reading {name}", parts, undo) as work:
            view.signal = signal
            view.write()
            await self._read_and_measure(work, signal, None)

    async def measure(self, window: tuple[float, float] | None, thresholds: Thresholds | None = None) -> None:
        """Measure the channel once more, in a window or whole, with other thresholds if they are given."""
        view = self.view
        if view.signal is None:
            return
        before = view.thresholds if view.measurement is None else view.measurement.thresholds

        def undo() -> None:
            view.thresholds = before
            view.write()

        with self.place.begin(f"Measuring {view.signal.name}", {"signal": 0.5, "tools": _tools_s(), "measuring": _MEASURING_S}, undo) as work:
            view.thresholds = thresholds or view.thresholds
            await self._read_and_measure(work, view.signal, window)

    async def _read_and_measure(self, work: Work, signal: Signal, window: tuple[float, float] | None) -> None:
        view = self.view
        recording = view.recording
        assert recording is not None
        try:
            saturation = recording.of_kind("SpO2")[:1]
            await work.through("signal", _bytes(f"reading {signal.name}"), loading_steps(signal, *saturation))
            await self.tools(work)
        except RecordingError as problem:
            view.refuse(str(problem))
            return
        except ImportError as problem:
            view.refuse(str(problem))
            return
        kind = signal.kind if signal.kind in READABLE_KINDS else "effort"
        measurement: BreathingMeasurement | None = None
        lag: SaturationLag | None = None
        refusal = ""
        try:
            steps = breathing_steps(recording, signal.name, window=window, kind=kind, thresholds=view.thresholds)
            measurement = await work.through("measuring", lambda _done, _total: f"finding the cycles in {signal.name}", steps)
            # How far the oximeter lags, where the recording has one and the cycles have apnoeas.
            if saturation and measurement.duty_ratio is not None:
                lag = measure_saturation_lag(recording, measurement)
        except (RecordingError, InvalidInputError) as problem:
            refusal = str(problem)
        view.show_measured(signal, measurement, lag, refusal)

    async def tools(self, work: Work) -> None:
        """Everything of scipy that measuring needs."""
        if scipy_is_ready():
            return

        def fetched(share: float) -> None:
            work.tell("tools", "fetching the part that measures", 0.3 * share)
            if work.stopped:
                raise WorkStopped(work.title)

        await fetch_scipy(fetched)
        steps = scipy_steps()
        for done, total in steps:
            work.tell("tools", f"starting the part that measures, {done} of {total}", 0.3 + 0.7 * done / (total or done))
            await work.answer_page(now=True)

    async def fit(self) -> None:
        """The most plausible loop behind the measured cycles, with SpO2 where the recording has it."""
        view = self.view
        if view.measurement is None:
            return
        view.refusal, view.laying = "", None
        try:
            measured = measured_from(view.measurement, view.lag)
        except (InvalidInputError, RecordingError) as problem:
            view.refuse(str(problem))
            return
        await self._fit_to(measured)

    async def fit_quiet(self) -> None:
        """The most plausible loop behind breathing that does not cycle: from what follows sighs, else from its restlessness."""
        view = self.view
        if view.measurement is None:
            return
        view.refusal, view.laying, view.ring_down = "", None, None
        envelope = max(view.measurement.envelopes, key=lambda item: item.values.size)
        breaths = view.measurement.breaths
        sighs = breaths.times_s[breaths.sizes > _SIGH * np.median(breaths.sizes)] if breaths.sizes.size else breaths.times_s
        found = ring_down_after_events(envelope.times_s, envelope.values, sighs) if sighs.size else None
        found = found if found is not None else ring_down_from_variability(envelope.times_s, envelope.values)
        if found is None:
            view.refuse(
                "Quiet breathing says nothing of the loop here: there is less than a quarter of an hour of it, or it shows no swing. "
                "Choose a longer window, or one with sighs."
            )
            return
        await self._fit_to(Measured(ring_down=found))

    async def _fit_to(self, measured: Measured) -> None:
        view = self.view
        with self.place.begin("Fitting the loop", {"fit": _FITTING_S}) as work:
            try:
                steps = fit_steps(view.bench.case, measured)
                view.fit = await work.through("fit", lambda _done, _total: "trying loops against the recording", steps)
                view.ring_down = measured.ring_down
            except (InvalidInputError, RecordingError) as problem:
                view.refusal = str(problem)
            view.show_fit()


def _kind_of(file: Any) -> tuple[int, bool]:
    """Length in bytes, and whether it looks like EDF; the file is left at its start."""
    size = file.seek(0, 2)
    file.seek(0)
    head = file.read(FIXED_BYTES)
    file.seek(0)
    return size, looks_like_edf(head)


def _tools_s() -> float:
    return 0.0 if scipy_is_ready() else _TOOLS_S


def _bytes(what: str) -> Any:
    """Words for so many bytes of so many."""

    def words(done: int, total: int | None) -> str:
        if not total:
            return what
        unit, name = (1e6, "MB") if total >= 1e6 else (1e3, "kB")
        return f"{what}, {done / unit:.0f} of {total / unit:.0f} {name}"

    return words
