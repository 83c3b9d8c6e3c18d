"""Recordings in the real browser: EDF by its channels and without its patient fields, what is no recording, and a fit."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from recordings.edf_bytes import channel, edf
from support.watched_pages import Watch, open_ready

NewContext = Callable[..., tuple[Any, Watch]]

_PATIENCE_MS = 90_000
"""The first recording fetches and starts scipy; a slow shared machine takes many times the usual seconds."""
_CYCLE_S = 50.0


def _invented_night(path: Path) -> Path:
    """Half an hour of EDF: airflow whose size waxes and wanes every 50 s, and a quiet second channel; invented."""
    time = np.arange(0.0, 1800.0, 0.125)
    wave = np.maximum(0.0, (np.cos(2.0 * np.pi * time / _CYCLE_S) + 0.2) / 1.2)
    flow = 20000.0 * wave * np.sin(2.0 * np.pi * 0.27 * time) + 100.0 * np.random.default_rng(3).standard_normal(time.size)
    path.write_bytes(edf([channel("Flow", flow.astype(int), 8), channel("Temp rectal", np.full(1800, 12000), 1, unit="degC")]))
    return path


def test_an_edf_night_is_opened_measured_and_fitted_and_its_patient_is_never_seen(new_context: NewContext, site: str, tmp_path: Path) -> None:
    context, _ = new_context(accept_downloads=True)
    page = open_ready(context, site)
    page.locator("#recording-input").set_input_files(_invented_night(tmp_path / "night.edf"))
    page.get_by_role("heading", name=re.compile(r"\d+ cycles used")).wait_for(timeout=_PATIENCE_MS)
    # Oracle: the recording's construction, 50 s; 2 % is promised at 10 dB.
    median = float(page.locator("#over-recording tr", has_text="Cycle length").first.locator("td").first.inner_text().removesuffix(" s"))
    assert abs(median / _CYCLE_S - 1.0) < 0.02
    channels = page.get_by_role("combobox", name="Channel").locator("option").all_inner_texts()
    # Each breath of the construction lasts 1/0.27 s, an apnoea is none of them; 2 % as for the cycle.
    rate = page.locator("#over-recording tr", has_text="Respiratory rate").first.locator("td").first.inner_text()
    assert abs(float(rate.removesuffix(" /min")) / (60.0 * 0.27) - 1.0) < 0.02
    assert page.get_by_role("heading", name=re.compile(r"Quality of the breaths: (Good|Fair|Poor)")).count() == 1
    assert channels == ["Flow (airflow, 8.00 Hz)", "Temp rectal (unknown, 1.00 Hz)"]

    page.get_by_role("button", name="Fit the loop to it").click()
    page.get_by_role("heading", name="The most plausible loop").wait_for(timeout=_PATIENCE_MS)
    page.get_by_role("button", name="Take this loop as the case").click()
    page.wait_for_function("/every (4[6-9]|5[0-4]) s/.test(document.getElementById('standing-text').innerText)", timeout=_PATIENCE_MS)

    # Nothing of the header's patient and recording fields is on the page or in what is handed on.
    page.locator("#open-handover").click()
    files = []
    for name in ("Save the page", "Save the cycles (CSV)", "Save the breaths (CSV)", "Save the case (JSON)"):
        with page.expect_download() as waiting:
            page.get_by_role("button", name=name).click()
        files.append(Path(waiting.value.path()).read_text(encoding="utf-8"))
    assert "SECRET" not in "".join(files) + page.content()
    page.close()


def test_what_is_no_recording_is_refused_in_words_and_the_page_goes_on(new_context: NewContext, site: str, tmp_path: Path) -> None:
    context, _ = new_context()
    page = open_ready(context, site)
    sentence = page.locator("#standing-text").inner_text()
    rubbish = tmp_path / "rubbish.csv"
    rubbish.write_bytes(np.random.default_rng(1).bytes(20_000))
    page.locator("#recording-input").set_input_files(rubbish)
    refusal = page.locator("#over-recording").get_by_role("alert")
    refusal.wait_for(timeout=_PATIENCE_MS)
    assert len(refusal.inner_text()) > 20 and "Traceback" not in refusal.inner_text()

    # One column without times: the page asks for the rate, and the answer opens it.
    single = tmp_path / "single.csv"
    time = np.arange(0.0, 1200.0, 0.25)
    values = np.maximum(0.0, np.cos(2.0 * np.pi * time / _CYCLE_S) + 0.2) * np.sin(2.0 * np.pi * 0.27 * time)
    single.write_text("\n".join(f"{value:.5f}" for value in values), encoding="utf-8")
    page.locator("#recording-input").set_input_files(single)
    rate = page.get_by_role("textbox", name="Samples a second")
    rate.wait_for(timeout=_PATIENCE_MS)
    rate.fill("4")
    rate.press("Enter")
    page.get_by_role("heading", name=re.compile(r"\d+ cycles used")).wait_for(timeout=_PATIENCE_MS)

    page.get_by_role("button", name="Close").first.click()
    assert page.locator("#standing-text").inner_text() == sentence
    page.close()
