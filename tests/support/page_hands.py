"""What a person's hands do on the page, for the browser tests: find the dot, drag it, read what stands there."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

__all__ = ["SHARED_RECORDING", "dot_on_screen", "drag_dot", "number_box", "numbers_of", "recording_file", "save_case", "standing", "trace_end"]

SHARED_RECORDING = Path(__file__).resolve().parents[3] / "shared" / "recordings" / "chest_volume_periodic.csv"

_DOT = """() => {
  const model = (type, test) => [...Bokeh.documents[0]._all_models.values()].find((m) => m.type === type && test(m))
  const figure = model("Figure", (m) => m.x_range.type === "Range1d" && (m.xaxis?.[0] ?? m.below[0]).axis_label?.includes("delay"))
  const view = Bokeh.index.find_one(figure)
  const dot = [...figure.renderers].reverse().find((r) => r.glyph?.type === "Scatter" && r.glyph.fill_alpha?.value !== 0)
  const {delay, sensitivity} = dot.data_source.data
  const area = view.el.getBoundingClientRect()
  const place = (x, y) => [area.left + view.frame.x_scale.compute(x), area.top + view.frame.y_scale.compute(y)]
  return {dot: place(delay[0], sensitivity[0]), delay: delay[0], sensitivity: sensitivity[0],
          low: place(figure.x_range.start, figure.y_range.start), high: place(figure.x_range.end, figure.y_range.end)}
}"""

_TRACE = """() => {
  const figures = [...Bokeh.documents[0]._all_models.values()].filter((m) => m.type === "Figure")
  const upper = figures.find((m) => (m.left[0].axis_label ?? "").startsWith("Ventilation"))
  const line = [...upper.renderers].filter((r) => r.glyph?.type === "Line" && r.data_source.data.value).pop()
  return Array.from(line.data_source.data.value)
}"""


def dot_on_screen(page: Any) -> dict[str, Any]:
    """Where the dot is: its place and the map's corners in page pixels, and its delay (s) and sensitivity."""
    return page.evaluate(_DOT)


def drag_dot(page: Any, right: float, up: float, steps: int = 12) -> None:
    """Drag the dot by this many pixels, in steps, and let go."""
    start = dot_on_screen(page)["dot"]
    page.mouse.move(*start)
    page.mouse.down()
    for step in range(1, steps + 1):
        page.mouse.move(start[0] + right * step / steps, start[1] - up * step / steps)
        page.wait_for_timeout(30)
    page.mouse.up()


def trace_end(page: Any) -> np.ndarray:
    """The last third of the ventilation that is drawn, L/min: where the loop's habit shows."""
    values = np.asarray(page.evaluate(_TRACE), dtype=float)
    return values[2 * len(values) // 3 :]


def standing(page: Any) -> str:
    """settles, rings or hunts, as the page says it."""
    return page.locator("#standing").get_attribute("data-standing")


def number_box(page: Any, label: str) -> Any:
    """The box of one number of the case, found by the words before its unit."""
    return page.get_by_role("textbox", name=label, exact=False).first


def save_case(page: Any) -> dict[str, Any]:
    """Press "Save case" and read the file that the browser saves."""
    with page.expect_download() as waiting:
        page.get_by_role("button", name="Save case").click()
    return json.loads(Path(waiting.value.path()).read_text(encoding="utf-8"))


def numbers_of(saved: dict[str, Any]) -> dict[str, Any]:
    """The numbers part of a saved case."""
    return saved["numbers"]


def recording_file(folder: Path) -> Path:
    """The shared real recording where it is; else 25 minutes of an invented one whose cycles of 40 s are known."""
    if SHARED_RECORDING.is_file():
        return SHARED_RECORDING
    rate, rng = 4.0, np.random.default_rng(7)
    time = np.arange(int(1500 * rate)) / rate
    wave = np.maximum(0.0, (np.cos(2.0 * np.pi * time / 40.0) + 0.3) / 1.3)
    values = wave * np.sin(2.0 * np.pi * 0.27 * time) + 0.02 * rng.standard_normal(time.size)
    path = folder / "invented_effort.csv"
    path.write_text("time_s,effort\n" + "\n".join(f"{t:.2f},{v:.5f}" for t, v in zip(time, values, strict=True)), encoding="utf-8")
    return path
