"""The benchmark's long night: an invented EDF of eight hours and ten channels, opened natively and on the built page."""

from __future__ import annotations

from pathlib import Path
from time import perf_counter
from typing import Any

import numpy as np

from browser_runtime import SITE_PATH

__all__ = ["native_night", "night_on_the_page", "write_night"]

HOURS, RATE_HZ, CYCLE_S = 8, 256, 55.0
CHANNELS = (
    ("Flow", "L/s"), ("Nasal pressure", "cmH2O"), ("Thorax", "mV"), ("Abdomen", "mV"), ("SpO2", "%"), ("EtCO2", "mmHg"), ("EEG C3", "uV"),
    ("EEG C4", "uV"), ("EOG", "uV"), ("ECG", "mV"),
)  # fmt: skip
_WIDTHS = (16, 80, 8, 8, 8, 8, 8, 80, 8, 32)
_BREATHS = ("Flow", "Nasal pressure", "Thorax", "Abdomen")

# When the channels stand in their list, and when the cycles do, in ms from the choice of the file.
_LOOK = """() => {
    const over = document.getElementById("over-recording");
    const found = (root, test) => [...root.querySelectorAll("*")].some((e) => test(e) || (e.shadowRoot && found(e.shadowRoot, test)));
    window.night = { begun: 0, list: 0, cycles: 0 };
    document.getElementById("recording-input").addEventListener("change", () => {
        window.night.begun = performance.now();
        const timer = setInterval(() => {
            const now = performance.now() - window.night.begun;
            window.night.list ||= found(over, (e) => e.nodeName === "OPTION" && e.textContent.startsWith("ECG")) ? now : 0;
            window.night.cycles ||= found(over, (e) => /^H\\d$/.test(e.nodeName) && / cycles used/.test(e.textContent)) ? now : 0;
            if (window.night.cycles) clearInterval(timer);
        }, 20);
    }, { capture: true, once: true });
}"""


def write_night(path: Path) -> Path:
    """Write the file, 147 MB: every other half hour waxes and wanes every 55 s, with a saturation that follows."""
    records, random = HOURS * 3600, np.random.default_rng(1)

    def field(text: object, width: int) -> bytes:
        return str(text).encode("ascii").ljust(width)

    rows: tuple[list[Any], ...] = (
        [name for name, _ in CHANNELS], [""] * 10, [unit for _, unit in CHANNELS], [0 if unit == "%" else -1 for _, unit in CHANNELS],
        [100 if unit == "%" else 1 for _, unit in CHANNELS], [-32768] * 10, [32767] * 10, [""] * 10, [RATE_HZ] * 10, [""] * 10,
    )  # fmt: skip
    head = field("0", 8) + field("X", 80) + field("X", 80) + field("01.01.85", 8) + field("22.00.00", 8) + field(256 * 11, 8)
    head += field("", 44) + field(records, 8) + field("1", 8) + field(10, 4)
    head += b"".join(field(item, width) for row, width in zip(rows, _WIDTHS, strict=True) for item in row)
    with path.open("wb") as file:
        file.write(head)
        for first in range(0, records, 600):
            time = first + np.arange(600 * RATE_HZ) / RATE_HZ
            periodic = (time // 1800) % 2 == 0
            wave = np.where(periodic, np.maximum(0.0, (np.cos(2.0 * np.pi * time / CYCLE_S) + 0.2) / 1.2), 0.7)
            breaths = 20000.0 * wave * np.sin(2.0 * np.pi * 0.27 * time)
            saturation = np.where(periodic, 93.0 + 4.0 * np.cos(2.0 * np.pi * (time - 25.0) / CYCLE_S), 97.0)
            block = np.empty((600, len(CHANNELS), RATE_HZ), dtype="<i2")
            for i, (name, unit) in enumerate(CHANNELS):
                noise = random.standard_normal(time.size)
                values = breaths + 150.0 * noise if name in _BREATHS else 2000.0 * noise
                values = np.round(saturation) / 100.0 * 65535.0 - 32768.0 if unit == "%" else values
                block[:, i] = values.reshape(600, RATE_HZ)
            file.write(block.tobytes())
    return path


def native_night(path: Path, turns: int = 3) -> dict[str, float]:
    """Smallest ms to the list of channels and to the cycles of the first, scipy imported before; and how many cycles."""
    import scipy.ndimage
    import scipy.signal

    from lagscape.recordings import measure_breathing, read_recording, with_derived_channels

    assert scipy.ndimage and scipy.signal
    lists, whole, cycles = [], [], 0
    for _ in range(turns):
        begun = perf_counter()
        recording = with_derived_channels(read_recording(path))
        lists.append(1e3 * (perf_counter() - begun))
        cycles = len(measure_breathing(recording, "Flow").used)
        whole.append(1e3 * (perf_counter() - begun))
    return {"list": min(lists), "cycles": min(whole), "n": cycles}


def night_on_the_page(browser: Any, server: str, path: Path, rested: bool, timeout_ms: float) -> dict[str, float]:
    """Ms from the choice of the file to the list and to the cycles; `rested`: after the page had time to fetch scipy by itself."""
    context = browser.new_context(viewport={"width": 1400, "height": 1000}, service_workers="block")
    page = context.new_page()
    page.goto(server + SITE_PATH)
    page.wait_for_function("document.body.dataset.state === 'ready'", timeout=timeout_ms)
    if rested:
        page.wait_for_timeout(15_000)
    page.evaluate(_LOOK)
    page.locator("#recording-input").set_input_files(path)
    page.wait_for_function("window.night.cycles > 0", timeout=timeout_ms)
    found: dict[str, float] = page.evaluate("window.night")
    context.close()
    return found
