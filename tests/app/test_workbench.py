"""The shared state and the views, driven as the page drives them, without a browser."""

import asyncio
import io
import json
import re

import numpy as np
import pytest

from lagscape import Case
from lagscape.app.case_view import CaseView
from lagscape.app.components.sheet import Request
from lagscape.app.handover_view import HandoverView
from lagscape.app.lever_view import LeverView
from lagscape.app.main import build
from lagscape.app.map_view import MapView
from lagscape.app.page_link import PageLink
from lagscape.app.recording_view import RecordingView
from lagscape.app.trace_view import TraceView
from lagscape.app.workbench import Workbench
from lagscape.case.parameters import Basis

# Panel warns of event loops and of its own use of Bokeh where no server runs; that is not what is tested here.
pytestmark = pytest.mark.filterwarnings("default")


@pytest.fixture
def bench() -> Workbench:
    return Workbench(PageLink())


def do(view, act: str, key: str = "", value: str = "", live: bool = False, event: str = "change") -> None:
    view.root._handle(Request(act, key, value, live, event))


class Side:
    """The recording's side sheet, for `do`."""

    def __init__(self, view: RecordingView) -> None:
        self.root = view.side


def html(view) -> str:
    return view.root.content["html"]


def sent(bench: Workbench, name: str) -> list[dict]:
    return [payload for kind, payload in bench.page.sent if kind == name]


def test_a_typed_number_is_taken_recorded_and_undone(bench):
    view = CaseView(bench)
    do(view, "number", "lung_volume_l", "2,5")
    assert bench.case.value("lung_volume_l") == 2.5 and bench.case.numbers["lung_volume_l"].basis is Basis.ASSUMED
    do(view, "undo")
    assert bench.case.value("lung_volume_l") == 2.0
    do(view, "redo")
    assert bench.case.value("lung_volume_l") == 2.5


@pytest.mark.parametrize(
    ("typed", "sentence"),
    [("99", "Lung gas volume must be a number from 0.5 to 8 L; got 99"), ("two", "Lung gas volume must be a number; got &#x27;two&#x27;")],
)
def test_a_refused_number_is_said_at_its_row_and_the_case_stays(bench, typed, sentence):
    view, before = CaseView(bench), bench.case
    do(view, "number", "lung_volume_l", typed)
    assert bench.case == before
    row = re.search(r'<div class="row refused">.*?</div>', html(view)).group(0)
    assert sentence in row and 'data-key="lung_volume_l"' in row
    do(view, "number", "lung_volume_l", "2.2")
    assert "refused" not in html(view)


def test_an_impossible_combination_is_said_where_it_was_typed(bench):
    view, before = CaseView(bench), bench.case
    do(view, "number", "inspired_pco2_mmhg", "39")
    assert bench.case == before and "above inspired" in html(view)


def test_pressures_are_typed_and_shown_in_the_chosen_unit(bench):
    view = CaseView(bench)
    bench.set_units("kPa")
    assert 'value="4.80"' in html(view)
    do(view, "number", "resting_paco2_mmhg", "5")
    # Oracle: 5 kPa = 37.503 mmHg (1 mmHg = 133.322387415 Pa, BIPM).
    assert bench.case.value("resting_paco2_mmhg") == pytest.approx(37.50308, rel=1e-6)


def test_every_slider_end_is_a_number_the_case_takes(bench):
    view = CaseView(bench)
    for name, item in bench.case.specifications.items():
        for position, bound in (("0", item.minimum), ("400", item.maximum)):
            do(view, "slide", name, position)
            wanted = bench.case.value(name)
            assert wanted == bound or name in bench.refusals, name
            do(view, "back")


def test_a_slider_follows_without_a_record_until_it_is_let_go(bench):
    view = CaseView(bench)
    do(view, "slide", "lung_volume_l", "300", live=True)
    assert bench.is_moving and not bench.history.can_undo
    do(view, "slide", "lung_volume_l", "310")
    assert not bench.is_moving and bench.history.can_undo


def test_the_basis_goes_round(bench):
    view = CaseView(bench)
    seen = []
    for _ in range(3):
        do(view, "basis", "lung_volume_l", event="click")
        seen.append(bench.case.numbers["lung_volume_l"].basis)
    assert set(seen) == set(Basis)


def test_what_the_clinic_has_becomes_the_number(bench):
    view = CaseView(bench)
    do(view, "open", "arterial_po2_mmhg", event="click")
    assert "From SpO2" in html(view)
    do(view, "entry", "arterial_po2_mmhg/0/0", "90.85")
    do(view, "apply", "arterial_po2_mmhg/0", event="click")
    # Oracle: Severinghaus 1979, table of the standard curve: 60 mmHg is 90.85 %. His formula is within 0.55 % of it, 1.4 mmHg there.
    assert bench.case.value("arterial_po2_mmhg") == pytest.approx(60.0, abs=1.4)
    assert bench.case.numbers["arterial_po2_mmhg"].basis is Basis.MEASURED
    do(view, "entry", "arterial_po2_mmhg/0/0", "99")
    do(view, "apply", "arterial_po2_mmhg/0", event="click")
    assert "refused" in html(view) and bench.case.value("arterial_po2_mmhg") == pytest.approx(60.0, abs=1.4)


def test_every_starting_case_of_every_loop_is_drawn(bench):
    views = [CaseView(bench), MapView(bench), TraceView(bench), LeverView(bench)]
    from lagscape.loops.register import LOOPS

    for kind, loop in LOOPS.items():
        for item in loop.starting_cases:
            do(views[0], "start", value=item.name)
            assert bench.case.kind == kind and bench.case.started_from == item.name
            values = np.asarray(views[2].strips[0].sources["now"].data["value"])
            assert values.size > 100 and np.all(np.isfinite(values))


def test_text_from_outside_is_escaped(bench):
    view = CaseView(bench)
    do(view, "number", "lung_volume_l", "<img src=x>")
    assert "<img" not in html(view) and "&lt;img" in html(view)


def test_the_map_follows_a_drag_and_settles(bench):
    view = MapView(bench)

    class At:
        x, y = 10.0, 1.5

    view._dragged(At())
    assert bench.is_moving and len(view.reach.data["words"]) == 2
    view._dropped(None)
    assert bench.case.loop().delay == pytest.approx(10.0) and bench.case.loop().sensitivity == pytest.approx(1.5)
    assert bench.judged.judgement.standing != "hunts"


def test_arrow_keys_move_by_one_per_cent_and_ten(bench):
    MapView(bench)
    before = bench.case.loop().delay
    bench.page.receive("nudge", {"right": 1, "up": 0, "large": False})
    assert bench.case.loop().delay == pytest.approx(1.01 * before)
    bench.page.receive("nudge", {"right": 0, "up": -2, "large": True})
    assert bench.case.loop().sensitivity == pytest.approx(3.0 / 1.21)


def test_a_lever_is_laid_changed_refused_and_taken_off(bench):
    view = LeverView(bench)
    do(view, "switch", "added_dead_space_ml", "true")
    assert bench.case.levers[0].dose == 500.0
    assert "gain margin" in html(view) and "With" not in html(view).split("added_dead_space_ml")[0]
    assert bench.judged.with_levers.margins.loop_gain < bench.judged.judgement.margins.loop_gain
    do(view, "dose", "added_dead_space_ml", "1e9")
    assert bench.case.levers[0].dose == 500.0 and "The dose of Added dead space must be" in html(view)
    do(view, "switch", "added_dead_space_ml", "false")
    assert bench.case.levers == ()


def test_the_dose_that_is_enough_is_found_and_laid(bench):
    view = LeverView(bench)
    do(view, "enough", event="click")
    assert "is enough for a gain margin of 1.3" in html(view)
    do(view, "take", "added_dead_space_ml", event="click")
    # Oracle: the judgement of the case with that dose.
    assert bench.judged.with_levers.margins.gain_margin >= 1.3
    do(view, "wanted", value="nonsense")
    assert "must be a positive number" in html(view)


def test_the_caution_of_the_trial_stands_with_heart_failure(bench):
    assert "2015;373:1095" in html(LeverView(bench))


def test_handover_files_hold_the_case_and_the_caution(bench):
    view = HandoverView(bench)
    for act in ("case", "page", "trace", "map-picture", "trace-picture", "print", "link"):
        do(view, act, event="click")
    files = {item["name"]: item["data"].decode() for item in sent(bench, "download")}
    assert Case.from_json(files["lagscape-case.json"]) == bench.case
    page = files["lagscape-case.html"]
    assert "not a medical device" in page.lower() and "Share of the excess" in page and "data:image/svg" in page
    # The name of the SVG standard is an address that nobody fetches; there is no other.
    assert "://" not in page.replace("http://www.w3.org/2000/svg", "")
    header, first = files["lagscape-traces.csv"].splitlines()[:2]
    assert header.split(",")[:3] == ["time_s", "ventilation_l_min", "paco2_mmhg"]
    # Oracle: a case starts at its rest: 36 mmHg by definition, the ventilation by the alveolar ventilation equation.
    assert float(first.split(",")[2]) == pytest.approx(36.0, rel=1e-9)
    assert float(first.split(",")[1]) == pytest.approx(863.0 * 0.2 / (0.7 * 36.0), rel=1e-9)
    assert files["lagscape-map.svg"].startswith("<svg") and files["lagscape-traces.svg"].startswith("<svg")
    assert sent(bench, "print")[0]["html"] == page
    assert Case.from_link(sent(bench, "copy_link")[0]["link"]) == bench.case


def _invented_effort() -> bytes:
    """Twenty minutes of breaths under an envelope that waxes and wanes every 45 s; invented."""
    time = np.arange(0.0, 1200.0, 0.25)
    wave = np.maximum(0.0, (np.cos(2.0 * np.pi * time / 45.0) + 0.2) / 1.2)
    values = wave * np.sin(2.0 * np.pi * 0.27 * time) + 0.01 * np.random.default_rng(5).standard_normal(time.size)
    return ("time_s,effort\n" + "\n".join(f"{t:.2f},{v:.5f}" for t, v in zip(time, values, strict=True))).encode()


def _open(view: RecordingView, data: bytes, name: str = "night.csv") -> None:
    assert view.root is not None
    asyncio.run(view.open({"name": name, "bytes": len(data), "file": io.BytesIO(data)}))


def test_a_recording_is_read_measured_corrected_and_laid(bench):
    view = RecordingView(bench)
    _open(view, _invented_effort())
    # Oracle: the construction of the recording: 1200/45 s, 26 whole cycles; the first and last are cut by the ends.
    assert 24 <= len(view.measurement.used) <= 26
    assert view.measurement.cycle_length_s.median == pytest.approx(45.0, rel=0.02)
    used = len(view.measurement.used)
    do(Side(view), "use", "3", "false")
    assert len(view.measurement.used) == used - 1
    do(Side(view), "prepare", event="click")
    assert "What will change" in view.side.content["html"] and view.laying is not None
    do(Side(view), "lay", event="click")
    assert bench.judged.judgement.cycle_length == pytest.approx(view.measurement.cycle_length_s.median, rel=1e-3)
    assert bench.case.numbers["peripheral_delay_s"].basis is Basis.MEASURED
    assert bench.measurement is view.measurement


def test_the_breaths_are_told_drawn_and_handed_on(bench):
    view = RecordingView(bench)
    _open(view, _invented_effort())
    table, said = view.measurement.breath_table, view.side.content["html"]
    # Oracle: the construction of the recording: breaths of 0.27 Hz, 16.2 a minute; the row shows three figures.
    assert "Respiratory rate" in said and f"{len(table)} breaths marked" in said and "× median" in said
    assert table.rate_per_min.median == pytest.approx(16.2, rel=0.03)
    assert f"Quality of the breaths: {table.quality.word.capitalize()}" in said and "Quality of the cycles:" in said
    assert "By the minute, as the bars over the window show:" in said and "Two detectors agree on" in said
    bars, marks = view.night.breaths.source.data, view.night.marks.source.data
    poor = view.night.breaths.poor.data
    assert len(bars["score"]) + len(poor["score"]) == 20 and max(bars["score"]) <= 1.0
    assert all(score >= 0.75 for score in bars["score"]) and all(score < 0.75 for score in poor["score"])
    assert len(marks["start"]) == len(table) and (np.asarray(marks["stop"]) > np.asarray(marks["start"])).all()
    handover = HandoverView(bench)
    do(handover, "breaths", event="click")
    (file,) = [item["data"].decode() for item in sent(bench, "download") if item["name"] == "lagscape-breaths.csv"]
    assert len(file.splitlines()) == len(table) + 1
    # A refused measurement leaves no mark behind.
    view.night.draw(None)
    assert len(view.night.marks.source.data["start"]) == len(view.night.breaths.source.data["score"]) == 0


def test_a_thermistor_claims_no_volume_on_the_page(bench):
    time = np.arange(0.0, 600.0, 0.25)
    values = np.sin(2.0 * np.pi * 0.27 * time)
    view = RecordingView(bench)
    _open(view, ("time_s,Thermistor\n" + "\n".join(f"{t:.2f},{v:.5f}" for t, v in zip(time, values, strict=True))).encode())
    said = view.side.content["html"]
    assert "No volume is claimed of this channel." in said and "Tidal volume" not in said and "Respiratory rate" in said
    # Where the end of inspiration is not known, half of each breath is marked.
    table, marks = view.measurement.breath_table, view.night.marks.source.data
    assert np.asarray(marks["stop"]) == pytest.approx(0.5 * (table.start_s + table.end_s))


def test_a_loop_is_fitted_to_the_recording_shown_and_taken(bench):
    view = RecordingView(bench)
    _open(view, _invented_effort())
    do(Side(view), "fit", event="click")
    said = view.side.content["html"]
    assert "The most plausible loop" in said and "90 % intervals" in said
    # The fitted loop's ventilation lies over every cycle used, one broken line each.
    assert np.isnan(view.modelled.data["time"]).sum() == len(view.measurement.used)
    do(Side(view), "take-fit", event="click")
    # Oracle: the recording's construction, 45 s; the fit allows its own model error of some per cent.
    assert bench.judged.judgement.cycle_length == pytest.approx(45.0, rel=0.06)
    assert bench.history.can_undo and "Take this loop" not in view.side.content["html"]


def _invented_night() -> bytes:
    """Nasal pressure, two efforts in step, and a saturation that falls 30 s after each apnoea's middle; cycles of 60 s; invented."""
    time = np.arange(0.0, 1800.0, 0.25)
    wave = np.maximum(0.0, (np.cos(2.0 * np.pi * time / 60.0) + 0.2) / 1.2)
    breath = wave * np.sin(2.0 * np.pi * 0.27 * time)
    noise = 0.01 * np.random.default_rng(11).standard_normal(time.size)
    saturation = np.round(94.0 + 4.0 * np.cos(2.0 * np.pi * (time - 30.0) / 60.0))
    columns = (time, np.sign(breath) * breath**2 + 0.1 * noise, breath + noise, 0.5 * breath + noise, saturation)
    rows = "\n".join(",".join(f"{value:.5f}" for value in row) for row in zip(*columns, strict=True))
    return f"time_s,Nasal Pressure,Chest,Abdomen,SpO2\n{rows}".encode()


def test_what_can_be_made_of_the_channels_is_offered_and_the_oximeter_is_read(bench):
    view = RecordingView(bench)
    _open(view, _invented_night())
    names = view.recording.channel_names
    assert "Nasal Pressure (square root)" in names and "Chest + Abdomen" in names
    for name in ("Nasal Pressure (square root)", "Chest + Abdomen"):
        do(Side(view), "channel", value=name)
        # Oracle: the recording's construction, 60 s.
        assert view.measurement.cycle_length_s.median == pytest.approx(60.0, rel=0.02), name
    assert view.lag is not None and view.lag.lag_s is not None
    said = view.side.content["html"]
    assert "Oximeter lags by" in said and "Shape: crescendo-decrescendo" in said


def test_a_threshold_is_changed_refused_and_set_back(bench):
    view = RecordingView(bench)
    _open(view, _invented_effort())
    used = len(view.measurement.used)
    do(Side(view), "threshold", "shortest_cycle_s", "60")
    # Oracle: the recording's cycles last 45 s, so that none is left when a cycle must last 60 s.
    assert len(view.measurement.used) < 0.2 * used and "Thresholds (1 changed)" in view.head.content["html"]
    do(Side(view), "threshold", "apnoea_below", "0.9")
    assert "Apnoea under, of the local peak must be a number from 0.02 to 0.6; got 0.9." in view.refusal
    do(Side(view), "usual-thresholds", event="click")
    assert len(view.measurement.used) == used and view.refusal == ""


def test_quiet_breathing_is_read_weakly_and_says_so(bench):
    # Half an hour of steady breaths whose size wanders a little; invented.
    rng, time = np.random.default_rng(8), np.arange(0.0, 1800.0, 0.25)
    size = 1.0 + 0.1 * np.interp(time, np.arange(0.0, 1805.0, 5.0), rng.standard_normal(361))
    values = size * np.sin(2.0 * np.pi * 0.27 * time)
    view = RecordingView(bench)
    _open(view, ("time_s,effort\n" + "\n".join(f"{t:.2f},{v:.5f}" for t, v in zip(time, values, strict=True))).encode())
    assert view.measurement.used == () and "No periodic breathing here" in view.side.content["html"]
    do(Side(view), "quiet", event="click")
    said = view.side.content["html"]
    assert ("That is weak" in said and "damping ratio" in said) or "says nothing of the loop" in view.refusal
    assert view.fit is not None or view.refusal


def test_a_table_without_times_asks_for_its_rate_and_then_opens(bench):
    view = RecordingView(bench)
    data = b"\n".join(line.split(b",")[1] for line in _invented_effort().splitlines())
    _open(view, data)
    assert view.recording is None and "sampl" in view.refusal
    do(Side(view), "rate", value="minus four")
    assert "positive number" in view.refusal
    do(Side(view), "rate", value="4")
    assert view.recording is not None and view.measurement.cycle_length_s.median == pytest.approx(45.0, rel=0.02)


def test_a_file_that_is_no_recording_is_refused_in_words_and_the_case_stays(bench):
    view, before = RecordingView(bench), bench.case
    _open(view, bytes(range(256)) * 40, "picture.png")
    assert len(view.refusal) > 20 and "Traceback" not in view.refusal and bench.case == before


def test_the_built_page_answers_its_bar():
    page = PageLink()
    views = build(page)
    assert set(views) == {"case", "map", "traces", "standing", "recording", "handover"}
    page.receive("save_case")
    saved = [payload for name, payload in page.sent if name == "download"][-1]["data"]
    page.receive("open_case", {"name": "bad.json", "bytes": 2, "file": io.BytesIO(b"{}")})
    said = [payload for name, payload in page.sent if name == "say"][-1]
    assert said["tone"] == "refused" and said["text"].startswith("bad.json: ")
    healthy = Case.from_starting_case("healthy-asleep")
    page.receive("set_link", {"link": healthy.to_link()})
    assert [payload for name, payload in page.sent if name == "standing"][-1]["state"] == "settles"
    page.receive("open_case", {"name": "good.json", "bytes": len(saved), "file": io.BytesIO(saved)})
    assert [payload for name, payload in page.sent if name == "standing"][-1]["state"] == "hunts"
    page.receive("copy_link")
    link = [payload for name, payload in page.sent if name == "copy_link"][-1]["link"]
    assert Case.from_link(link) == Case.from_json(json.dumps(json.loads(saved)))
