"""The tremor view driven as the page drives it, without a browser. Oracle: the construction of the invented recordings."""

from __future__ import annotations

import asyncio
import io
import json

import numpy as np
import pytest

from lagscape import Case
from lagscape.app.components.sheet import Request
from lagscape.app.handover_view import HandoverView
from lagscape.app.page_link import PageLink
from lagscape.app.recording_view import RecordingView
from lagscape.app.workbench import Workbench
from lagscape.case.parameters import Basis
from lagscape.questions.tremor_load import Load, loaded_loop, tremor_frequency
from recordings.edf_bytes import channel, edf

# Panel warns of event loops and of its own use of Bokeh where no server runs; that is not what is tested here.
pytestmark = pytest.mark.filterwarnings("default")

RATE = 100.0
ANKLE = Case.from_starting_case("ankle-calm")
LOAD = Load(2.0, 0.15)
BEFORE = tremor_frequency(ANKLE.loop())
AFTER = tremor_frequency(loaded_loop(ANKLE.loop(), LOAD))


@pytest.fixture
def view() -> RecordingView:
    return RecordingView(Workbench(PageLink()))


def hand(parts: list[tuple[float, float]], extra: str = "", unit: str = "g") -> bytes:
    """Three axes that shake at each frequency for so many seconds, in a little noise, with gravity on the third; invented."""
    rng = np.random.default_rng(6)
    phase = 2.0 * np.pi * np.cumsum(np.concatenate([np.full(round(seconds * RATE), frequency) for frequency, seconds in parts])) / RATE
    axes = np.outer(np.sin(phase), (0.05, 0.03, 0.01)) + 0.004 * rng.standard_normal((phase.size, 3)) + (0.0, 0.0, 1.0)
    rows = "\n".join(f"{i / RATE:.2f}," + ",".join(f"{value:.6f}" for value in row) for i, row in enumerate(axes))
    return (f"time_s,Acc X ({unit}),Acc Y ({unit}),Acc Z ({unit}){extra}\n" + rows).encode()


def open_file(view: RecordingView, data: bytes, name: str = "hand.csv") -> None:
    assert view.root is not None
    asyncio.run(view.open({"name": name, "bytes": len(data), "file": io.BytesIO(data)}))


def do(view: RecordingView, act: str, key: str = "", value: str = "", event: str = "change") -> None:
    view.tremor.side._handle(Request(act, key, value, False, event))


def said(view: RecordingView) -> str:
    return view.tremor.side.content["html"]


def head(view: RecordingView) -> str:
    return view.tremor.head.content["html"]


def window(view: RecordingView, start: float, stop: float) -> None:
    do(view, "edge", "start", f"{start}")
    do(view, "edge", "stop", f"{stop}")
    assert view.refusal == "" and view.tremor.state.current.window == (start, stop)


def take_both(view: RecordingView) -> None:
    """Two minutes, the second of them loaded, each taken and the load said."""
    open_file(view, hand([(BEFORE, 60.0), (AFTER, 60.0)]))
    window(view, 0.0, 60.0)
    do(view, "hold", "unloaded", event="click")
    do(view, "edge", "stop", "120")
    do(view, "edge", "start", "60")
    do(view, "hold", "loaded", event="click")
    do(view, "mass", value="2000")
    do(view, "arm", value="15")


def test_an_accelerometer_opens_as_a_tremor_with_its_axes_together(view):
    open_file(view, hand([(6.0, 60.0)]))
    measured = view.tremor.state.current
    assert measured.signals == ("Acc X", "Acc Y", "Acc Z") and measured.peak_frequency_hz == pytest.approx(6.0, abs=0.01)
    assert not view._breathing.visible and view.tremor.root.visible and view.measurement is None
    assert "Acc X + Acc Y + Acc Z (3 axes, accelerometer, 100 Hz)" in head(view) and "sum of their spectra" in head(view)
    # Closed form: (0.05^2 + 0.03^2 + 0.01^2)^(1/2) g at 6 Hz is 0.0592 x 9807 mm/s2 / (2 pi 6)^2 = 0.408 mm.
    assert measured.displacement_mm == pytest.approx(0.0592 * 9806.65 / (2 * np.pi * 6.0) ** 2, rel=0.03)
    labels = ("Its standard error", "Width at half power", "Power in the peak", "Displacement, amplitude")
    for words in ("Peak frequency", "6.00 Hz", *labels, "Quality: Sharp"):
        assert words in said(view), words
    spectrum = view.tremor.spectrum
    assert spectrum.marks.data["text"] == ["6.00 Hz"] and len(spectrum.brackets.data["start"]) == 1
    assert spectrum.brackets.data["start"][0] < 6.0 < spectrum.brackets.data["stop"][0]
    assert view.tremor.strip.close.yaxis.major_label_overrides == {0.0: "X", -1.0: "Y", -2.0: "Z"}


def test_one_axis_alone_and_another_reading_are_a_choice(view):
    open_file(view, hand([(6.0, 60.0)]))
    do(view, "channel", value="Acc Y")
    assert view.tremor.state.current.signals == ("Acc Y",)
    do(view, "read-as", value="rotation")
    assert view.tremor.state.current.kind == "rotation" and "no known angular velocity" in said(view)
    do(view, "read-as", value="breathing")
    assert view._breathing.visible and not view.tremor.root.visible and view.bench.tremor is None
    assert 'value="breathing" selected' in view.head.content["html"]


def test_a_file_with_both_opens_as_breathing_and_the_wrist_is_one_choice_away(view):
    time = np.arange(0.0, 300.0, 0.05)
    flow, wrist = np.sin(2 * np.pi * 0.25 * time), np.sin(2 * np.pi * 5.0 * time)
    rows = "\n".join(f"{t:.2f},{a:.4f},{b:.4f}" for t, a, b in zip(time, flow, wrist, strict=True))
    open_file(view, f"time_s,Flow,Wrist gyro Y (deg/s)\n{rows}".encode())
    assert view.measurement is not None and view._breathing.visible
    assert "Wrist gyro Y (gyroscope, 20.0 Hz)" in view.head.content["html"]
    view.handle(Request("channel", "", "Wrist gyro Y", False, "change"))
    assert view.measurement is None and view.tremor.state.current.peak_frequency_hz == pytest.approx(5.0, abs=0.01)
    assert "Swing, amplitude" in said(view)
    view.tremor.head._handle(Request("channel", "", "Flow", False, "change"))
    assert view.measurement is not None and view._breathing.visible


def test_a_long_file_shows_its_first_minute_and_the_window_is_typed_or_moved(view):
    open_file(view, hand([(6.0, 100.0), (4.0, 140.0)]))
    assert view.tremor.state.current.window == (0.0, 60.0)
    do(view, "edge", "stop", "240")
    do(view, "edge", "start", "110")
    assert view.tremor.state.current.peak_frequency_hz == pytest.approx(4.0, abs=0.01)
    do(view, "edge", "start", "300")
    assert "The window must start before it ends" in head(view)
    do(view, "edge", "start", "soon")
    assert "must be a number; got &#x27;soon&#x27;" in head(view)
    do(view, "edge", "start", "230")
    assert "less than 20 s" in head(view) and view.tremor.state.current is None
    do(view, "measure-whole", event="click")
    assert view.tremor.state.current.window == (0.0, 240.0)


def test_a_dragged_window_is_measured_when_the_hand_rests(view):
    data = hand([(6.0, 100.0), (4.0, 140.0)])

    async def job() -> None:
        assert view.root is not None
        await view.open({"name": "hand.csv", "bytes": len(data), "file": io.BytesIO(data)})
        for start in (20.0, 60.0, 120.0):
            view.tremor.strip.shown.update(start=start, end=start + 60.0)
        assert view.tremor.state.current.window == (0.0, 60.0)
        await asyncio.sleep(0.8)

    asyncio.run(job())
    assert view.tremor.state.current.window == (120.0, 180.0)
    assert view.tremor.state.current.peak_frequency_hz == pytest.approx(4.0, abs=0.01)


def test_unloaded_and_loaded_are_compared_with_the_case_and_laid(view):
    bench = view.bench
    bench.begin(ANKLE)
    take_both(view)
    study = bench.tremor
    assert study.unloaded.peak_frequency_hz == pytest.approx(BEFORE, abs=0.02)
    assert study.answer.prediction.shift_hz == pytest.approx(AFTER - BEFORE, abs=0.05)
    for words in ("0.0450 kg m²", "What the load says: moves", "points to the mechanical-reflex loop", "Predicted by the loop"):
        assert words in said(view), words
    assert [text.split()[0] for text in view.tremor.spectrum.marks.data["text"]] == ["unloaded", "loaded"]
    do(view, "prepare", event="click")
    assert "What will change" in said(view) and "Limb inertia" in said(view) and "Joint stiffness" in said(view)
    assert bench.case == ANKLE
    do(view, "cancel", event="click")
    assert "What will change" not in said(view)
    do(view, "prepare", event="click")
    do(view, "lay", event="click")
    # Oracle: the recording was made to shake at the ankle's own two frequencies; the peaks are known to about 0.02 Hz.
    assert bench.case.value("inertia_kg_m2") == pytest.approx(ANKLE.value("inertia_kg_m2"), rel=0.1)
    assert bench.case.numbers["stiffness_n_m_rad"].basis is Basis.MEASURED
    assert [payload for name, payload in bench.page.sent if name == "show"][-1] == {"view": "recording", "open": False}
    bench.undo()
    assert bench.case == ANKLE


def test_a_peak_that_stays_is_said_to_point_elsewhere_and_is_not_laid(view):
    view.bench.begin(ANKLE)
    open_file(view, hand([(6.0, 60.0)]))
    do(view, "hold", "unloaded", event="click")
    open_file(view, hand([(5.95, 60.0)]), "weight.csv")
    assert "Unloaded: 0:00 to 1:00 of hand.csv" in said(view)
    do(view, "hold", "loaded", event="click")
    do(view, "mass-unit", value="kg")
    do(view, "mass", value="2")
    do(view, "arm", value="15")
    assert "What the load says: stays" in said(view) and "points to a source elsewhere" in said(view)
    do(view, "prepare", event="click")
    assert "This loop does not explain such a tremor" in said(view) and view.bench.case == ANKLE
    # A window of the same stretch cannot be held as the other one.
    do(view, "hold", "unloaded", event="click")
    assert "overlaps the one held as loaded" in said(view) and view.bench.tremor.unloaded is not view.tremor.state.current
    do(view, "release", event="click")
    assert "What the load says" not in said(view) and view.bench.tremor.loaded is None


def test_a_breathing_case_offers_a_reflex_case_and_loses_nothing(view):
    bench = view.bench
    breathing = bench.case
    assert breathing.kind == "breathing"
    take_both(view)
    assert "predicts no shift" in said(view) and "usual rule of 1 Hz" in said(view)
    do(view, "prepare", event="click")
    assert "A tremor is laid on a reflex case" in said(view) and "Ankle, ordinary reflex" in said(view) and bench.case == breathing
    do(view, "start-from", "ankle-calm", event="click")
    assert "What will change" in said(view) and "Undo brings the one of now back" in said(view) and bench.case == breathing
    assert "Compared with Ankle, ordinary reflex" in said(view) and "Predicted by the loop" in said(view)
    do(view, "lay", event="click")
    assert bench.case.kind == "reflex" and bench.case.numbers["inertia_kg_m2"].basis is Basis.MEASURED
    bench.undo()
    assert bench.case == breathing


def test_comparing_alone_lists_no_change(view):
    take_both(view)
    do(view, "compare-with", "ankle-clonus", event="click")
    assert view.tremor.state.laying is None and "Predicted by the loop" in said(view) and view.bench.case.kind == "breathing"


@pytest.mark.parametrize(("act", "value", "words"), [("mass", "a brick", "The mass must be a number"), ("arm", "500", "from 0.01 to 1 m; got 5 m")])
def test_a_load_that_is_none_is_refused_beside_its_box(view, act, value, words):
    take_both(view)
    do(view, act, value=value)
    assert words in said(view) and view.tremor.state.load is None
    do(view, act, value="15")
    assert view.tremor.state.load is not None and words not in said(view)


def test_the_range_that_the_strip_moves_belongs_to_a_figure(view):
    # Bokeh's range tool moves only ranges that a figure has; without one the window would follow the hand on the screen alone.
    assert view.root is not None and view.tremor.strip.shown in view.tremor.strip.close.extra_x_ranges.values()


def test_the_handover_offers_the_tremor_and_the_report_shows_it(view):
    bench = view.bench
    bench.begin(ANKLE)
    handover = HandoverView(bench)
    assert "Save the tremor" not in handover.root.content["html"]
    take_both(view)
    assert "Save the tremor (CSV)" in handover.root.content["html"]
    for act in ("tremor", "tremor-json", "spectrum", "spectrum-picture", "page"):
        handover.root._handle(Request(act, "", "", False, "click"))
    files = {payload["name"]: payload["data"].decode() for name, payload in bench.page.sent if name == "download"}
    assert set(files) == {"lagscape-tremor.csv", "lagscape-tremor.json", "lagscape-spectrum.csv", "lagscape-spectrum.svg", "lagscape-case.html"}
    assert json.loads(files["lagscape-tremor.json"])["answer"]["verdict"] == "moves"
    assert len(files["lagscape-tremor.csv"].splitlines()) == 3
    assert "Recording: tremor, loaded" in files["lagscape-case.html"] and "hand.csv" not in "".join(files.values())


def test_without_a_peak_nothing_is_laid_and_it_says_why(view):
    view.bench.begin(ANKLE)
    noise = np.random.default_rng(1).standard_normal(6000)
    open_file(view, ("time_s,Acc X (g)\n" + "\n".join(f"{i / RATE:.2f},{value:.5f}" for i, value in enumerate(noise))).encode())
    assert "Quality: No peak" in said(view) and view.tremor.spectrum.marks.data["text"] == []
    do(view, "prepare", event="click")
    assert "No peak stands out of the spectrum, so there is nothing to lay" in said(view)


def test_a_table_without_times_asks_for_its_rate_also_as_the_second_file(view):
    data = b"\n".join(line.split(b",", 1)[1] for line in hand([(6.0, 60.0)]).splitlines())
    open_file(view, data)
    assert 'data-act="rate"' in view.head.content["html"]
    view.handle(Request("rate", "", "100", False, "change"))
    assert view.tremor.state.current.peak_frequency_hz == pytest.approx(6.0, abs=0.01)
    open_file(view, data, "second.csv")
    assert 'data-act="rate"' in head(view)
    view.tremor.head._handle(Request("rate", "", "50", False, "change"))
    assert view.recording.name == "second.csv" and view.tremor.state.current.peak_frequency_hz == pytest.approx(3.0, abs=0.01)


def test_an_edf_with_three_axes_opens_the_same_way(view):
    time = np.arange(0.0, 60.0, 0.01)
    axes = [(20000.0 * size * np.sin(2.0 * np.pi * 7.0 * time)).astype(int) for size in (1.0, 0.6, 0.2)]
    data = edf([channel(f"Acc {letter}", axis, 100, unit="g") for letter, axis in zip("XYZ", axes, strict=True)])
    open_file(view, data, "hand.edf")
    measured = view.tremor.state.current
    assert measured.signals == ("Acc X", "Acc Y", "Acc Z") and measured.peak_frequency_hz == pytest.approx(7.0, abs=0.01)
    assert len(view.tremor.strip.bands.data["time"]) > 3000


def test_bare_columns_x_y_z_open_as_an_accelerometer_that_is_not_calibrated(view):
    data = hand([(6.0, 60.0)]).replace(b"Acc X (g),Acc Y (g),Acc Z (g)", b"x,y,z")
    open_file(view, data)
    assert view.tremor.state.current.kind == "acceleration" and view.tremor.state.current.displacement_mm is None
    assert "Not calibrated" in said(view)


def test_decibels_and_themes_change_the_drawing_alone(view):
    open_file(view, hand([(6.0, 60.0)]))
    measured = view.tremor.state.current
    do(view, "decibels", value="true")
    assert max(view.tremor.spectrum.curves["window"].data["power"]) == pytest.approx(0.0, abs=1e-9)
    view.bench.set_theme("dark")
    assert view.tremor.spectrum.lines["loaded"].glyph.line_color == "#E58A55" and view.tremor.state.current is measured
