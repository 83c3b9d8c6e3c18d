"""A hand that does everything in quick turns: drags, keys, numbers, levers, other cases, undo. Nothing breaks, and what stands is true."""

from __future__ import annotations

import json
import random
from typing import Any

import pytest

from lagscape import analyse
from lagscape.case.case_file import case_from_json
from support.page_hands import dot_on_screen, save_case, standing

TURNS = 18

_LENGTHS = """() => [...Bokeh.documents[0]._all_models.values()].filter((model) => model.type === "ColumnDataSource")
    .map((source) => Object.values(source.data).map((column) => column.length))"""


class Hand:
    """Random turns from a seed."""

    def __init__(self, page: Any, seed: int) -> None:
        self.page, self.random = page, random.Random(seed)
        self.cases = page.locator("#slot-case select").nth(1)

    def turn(self) -> str:
        name = self.random.choice(["drag", "quick_drag", "case", "undo", "disturbance", "lever", "keys", "number"])
        getattr(self, f"_{name}")()
        self.page.wait_for_timeout(self.random.choice([0, 60, 400, 1200]))
        return name

    def _drag(self, pause_ms: int = 25) -> None:
        x, y = dot_on_screen(self.page)["dot"]
        self.page.mouse.move(x, y)
        self.page.mouse.down()
        for _ in range(20):
            x, y = x + self.random.uniform(-25.0, 25.0), y + self.random.uniform(-25.0, 25.0)
            self.page.mouse.move(x, y)
            self.page.wait_for_timeout(pause_ms)
        self.page.mouse.up()

    def _quick_drag(self) -> None:
        self._drag(pause_ms=0)

    def _case(self) -> None:
        self.cases.select_option(index=self.random.randrange(self.cases.locator("option").count()))

    def _undo(self) -> None:
        self.page.locator("#slot-map").focus()
        self.page.keyboard.press("Control+z")

    def _disturbance(self) -> None:
        box = self.page.locator("#slot-traces select").first
        box.select_option(index=self.random.randrange(box.locator("option").count()))

    def _lever(self) -> None:
        self.page.locator("#slot-standing input[type=checkbox]").nth(self.random.randrange(6)).click()

    def _keys(self) -> None:
        self.page.locator("#slot-map").focus()
        for _ in range(6):
            self.page.keyboard.press(self.random.choice(["ArrowUp", "ArrowDown", "ArrowLeft", "ArrowRight", "Shift+ArrowUp", "Shift+ArrowLeft"]))

    def _number(self) -> None:
        box = self.page.locator("#slot-case input[type=text]").nth(self.random.randrange(8))
        box.fill(f"{self.random.uniform(0.1, 60.0):.2f}")
        box.press("Enter")


@pytest.mark.parametrize("seed", [2, 5])
def test_whatever_the_hand_does_the_page_stays_whole_and_true(ready_page: Any, ready_watch: Any, seed: int) -> None:
    # Oracle: the same package outside the browser, on the case that the page saves; its sentence is of the case before any lever.
    hand = Hand(ready_page, seed)
    turns = []
    for _ in range(TURNS):
        turns.append(hand.turn())
        assert ready_watch.errors == [], turns
    ready_page.wait_for_function("window.lagscape.page.link.underWay === null")
    ready_page.wait_for_timeout(1500)
    for lengths in ready_page.evaluate(_LENGTHS):
        assert len(set(lengths)) <= 1, lengths
    saved = {**save_case(ready_page), "levers": []}
    assert analyse(case_from_json(json.dumps(saved))).standing == standing(ready_page)
