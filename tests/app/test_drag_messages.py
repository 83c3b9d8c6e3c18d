"""What a dragged dot sends to the page: little, in one patch, and only what Bokeh paints without painting the axes and the boundary anew."""

import json

import numpy as np
import pytest
from bokeh.core.serialization import Serializer
from bokeh.document import Document
from bokeh.document.json import PatchJson
from bokeh.models import ColumnDataSource, Plot, Range1d

from lagscape.app.case_view import CaseView
from lagscape.app.components.sheet import Sheet
from lagscape.app.document_link import DocumentLink, _PatchSerializer
from lagscape.app.map_view import MapView
from lagscape.app.page_link import PageLink
from lagscape.app.standing_view import StandingView
from lagscape.app.trace_view import TraceView
from lagscape.app.workbench import Workbench

# Panel warns of event loops and of its own use of Bokeh where no server runs; that is not what is tested here.
pytestmark = pytest.mark.filterwarnings("default")


class At:
    """A pointer event of the map, with data coordinates."""

    def __init__(self, x: float, y: float) -> None:
        self.x, self.y = x, y


class Drawn:
    """The figures of the middle column in a document of their own, and the patches that would go to the page."""

    def __init__(self) -> None:
        self.bench = Workbench(PageLink())
        self.map, self.traces = MapView(self.bench), TraceView(self.bench)
        StandingView(self.bench)
        self.document = Document()
        for plot in (self.map.plot, *(strip.plot for strip in self.traces.strips)):
            self.document.add_root(plot)
        self.patches: list[list[dict]] = []
        self.link = DocumentLink(self.document, lambda patch, parts: self.patches.append(json.loads(patch)["events"]))
        self.link.open()

    def drag(self, x: float, y: float) -> list[dict]:
        """Drags the dot there and returns the events of the one patch that follows."""
        before = len(self.patches)
        with self.link:
            self.map._dragged(At(x, y))
        (events,) = self.patches[before:]
        return events

    def drop(self) -> list[dict]:
        before = len(self.patches)
        with self.link:
            self.map._dropped(None)
        return [event for events in self.patches[before:] for event in events]


def _levels(document: Document, source: ColumnDataSource) -> set[str]:
    """Levels of all that draws from this source."""
    drawing = [model for figure in document.select({"type": Plot}) for model in (*figure.renderers, *figure.center)]
    sources = [(getattr(model, "data_source", None) or getattr(model, "source", None), model.level) for model in drawing]
    return {level for used, level in sources if used is source}


def test_a_drag_changes_only_what_lies_on_the_overlay():
    # Oracle: Bokeh 3.7 paints a figure's first canvas anew unless everything invalid has the level "overlay"; a range, an axis or the
    # figure itself makes all invalid.
    drawn = Drawn()
    for x, y in ((20.0, 2.8), (18.0, 2.5), (15.0, 2.2), (12.0, 1.5), (14.0, 1.2)):
        events = drawn.drag(x, y)
        assert events
        for event in events:
            model = drawn.document.get_model_by_id(event["model"]["id"])
            assert isinstance(model, ColumnDataSource), f"{type(model).__name__} changed under the hand"
            assert _levels(drawn.document, model) == {"overlay"}


def test_a_drag_sends_each_source_once_and_the_times_never():
    drawn = Drawn()
    drawn.drag(20.0, 2.8)  # the first move has fewer points than the traces at rest, so that it brings new times
    events = drawn.drag(19.0, 2.7)
    assert len({event["model"]["id"] for event in events}) == len(events) <= 5
    times = [name for event in events for name, _ in event["data"]["entries"] if name == "time"]
    assert times == []


def test_the_dot_is_put_in_its_place_when_the_hand_lets_go():
    # The page moves the dot itself, so that Python's own copy says nothing of where it is: even a drag back to the start must set it.
    drawn = Drawn()
    loop = drawn.bench.case.loop()
    drawn.drag(10.0, 1.5)
    drawn.drag(float(loop.delay), float(loop.sensitivity))
    settled = drawn.drop()
    assert drawn.map.dot.id in {event["model"]["id"] for event in settled}


def test_an_axis_under_the_hand_grows_in_few_steps_and_never_shrinks():
    strip = TraceView(Workbench(PageLink())).strips[0]
    times, ends = np.linspace(0.0, 1.0, 5), []
    strip.show("before", [], [])
    strip.range.update(start=0.0, end=1.0)
    heights = np.linspace(0.5, 4.0, 36)
    for height in heights:
        strip.show("now", times, height * np.array([0.0, 1.0, 0.2, 1.0, 0.0]))
        strip.fit(grow_only=True, floor=0.0)
        assert strip.range.end >= height and strip.range.start == 0.0
        ends.append(strip.range.end)
    # Each growth takes a quarter of what is drawn beyond it: from 1 to above 4 that is log(4)/log(1.25), 6.2 steps, not 36.
    assert ends == sorted(ends) and len(set(ends)) <= 8
    assert isinstance(strip.range, Range1d)


@pytest.mark.parametrize(("delay", "sensitivity", "side"), [(24.3, 3.0, -13), (24.3, 1.0, 13)])
def test_the_words_at_the_two_arrows_stand_apart(delay, sensitivity, side):
    # Inside the boundary the upright arrow rises and its words with it: the words of the level one go below their line, else above.
    drawn = Drawn()
    drawn.drag(delay, sensitivity)
    upright, level = (dict(zip(drawn.map.reach.data, row, strict=True)) for row in zip(*drawn.map.reach.data.values(), strict=True))
    assert (upright["to_sensitivity"] > sensitivity) == (side > 0)
    assert level["down"] == side and level["words_sensitivity"] == pytest.approx(sensitivity)


def test_numbers_follow_the_hand_without_new_html_and_settle_with_it():
    bench = Workbench(PageLink())
    view, drawn = CaseView(bench), MapView(bench)
    before = dict(view.root.content)
    view._drawn_at = 0.0
    drawn._dragged(At(10.0, 2.0))
    assert view.root.content == before
    assert set(view.root.adjusted) == {
        "peripheral_delay_s", "central_delay_s", "peripheral_gain_l_min_mmhg", "central_gain_l_min_mmhg",
    }  # fmt: skip
    assert view.root.adjusted["peripheral_delay_s"]["number"] == "10.0"
    drawn._dropped(None)
    assert view.root.adjusted == {} and 'data-key="peripheral_delay_s" value="10.0"' in view.root.content["html"]


def test_html_is_shown_again_after_single_values_were_laid_over_it():
    sheet = Sheet()
    sheet.show("<p>1</p>")
    first = sheet.content
    sheet.show("<p>1</p>")
    assert sheet.content is first
    sheet.adjust({"key": {"number": "2"}})
    sheet.show("<p>1</p>")
    assert sheet.content != first and sheet.adjusted == {}


def test_a_number_that_returns_is_adjusted_back():
    bench = Workbench(PageLink())
    view, case = CaseView(bench), bench.case
    for value in (3.0, case.value("lung_volume_l")):
        view._drawn_at = 0.0
        bench.move(case.with_number("lung_volume_l", value))
    # The opening case's lung gas volume is 2 L.
    assert view.root.adjusted["lung_volume_l"]["number"] == "2.00"


def test_patches_are_those_of_bokehs_own_serializer():
    # Oracle: Bokeh's serializer, told of all models that the page has. Models made later come whole, in both.
    drawn = Drawn()
    models = drawn.document.models
    models.flush_synced()
    events: list = []
    drawn.document.on_change(events.append)
    with drawn.link:
        drawn.map.dot.data = {"delay": [1.0], "sensitivity": [2.0]}
        drawn.map.plot.x_range = Range1d(1.0, 2.0)
        drawn.map.plot.background_fill_color = "white"
        own, bokehs = _PatchSerializer(models), Serializer(references=models.synced_references)
        assert len(events) == 3
        assert PatchJson(events=own.encode(events)) == PatchJson(events=bokehs.encode(events))
        assert {model.id for model in models if own.has_ref(model)} == {model.id for model in models if bokehs.has_ref(model)}


@pytest.mark.parametrize("order", ["column first", "all first", "columns", "all twice"])
def test_the_data_of_a_source_go_once_whatever_changed_in_a_message(order):
    # Oracle: the source itself. Bokeh on the page stops in the middle of a patch when the columns of a source differ in length.
    source = ColumnDataSource({"time": [0.0, 1.0], "value": [1.0, 2.0]})
    figure = Plot(x_range=Range1d(), y_range=Range1d(), tags=[source])
    document = Document()
    document.add_root(figure)
    patches: list[list[dict]] = []
    link = DocumentLink(document, lambda patch, parts: patches.append(json.loads(patch)["events"]))
    link.open()
    three = {"time": [0.0, 0.5, 1.0], "value": [4.0, 5.0, 6.0]}
    with link:
        if order == "column first":
            source.data["value"] = [3.0, 4.0]
            source.data = three
        elif order == "all first":
            source.data = three
            source.data["value"] = [7.0, 8.0, 9.0]
        elif order == "columns":
            source.data["value"] = [3.0, 4.0]
            source.data["time"] = [0.0, 2.0]
        else:
            source.data = {"time": [], "value": []}
            source.data = three
    ((event,),) = patches
    sent = event["data"] if event["kind"] == "ColumnDataChanged" else event["new"]
    columns = dict(sent["entries"]) if sent.get("type") == "map" else sent
    assert {name: list(values) for name, values in columns.items()} == {name: list(values) for name, values in source.data.items()}
