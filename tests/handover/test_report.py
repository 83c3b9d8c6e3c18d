"""The report. Oracles: the HTML parser of the standard library, the case and the analysis it was made from."""

import base64
import html.parser
import re
import xml.etree.ElementTree as ElementTree
from dataclasses import replace

import numpy as np
import pytest

from lagscape.case.case import Case, LeverSetting
from lagscape.case.parameters import Basis
from lagscape.handover.references import METHODS, methods_used, references
from lagscape.handover.report import CAUTION, LeverLine, Picture, Report, Section, report_html
from lagscape.quantities import figure
from lagscape.questions.standing import Analysis, Standing
from lagscape.recordings.breathing import measure_breathing
from lagscape.recordings.reading import read_recording
from lagscape.version import VERSION

CASE = Case.from_starting_case("heart-failure-periodic").with_number("resting_paco2_mmhg", 36.0, "measured", 1.0)

HUNTS = Analysis(
    kind="breathing",
    standing=Standing.HUNTS,
    sentence="Hunts. Left alone, this loop cycles every 61 s with 18 s of apnoea.",
    loop_gain=1.4631,
    gain_margin=0.68348,
    phase_margin_rad=-0.5,
    delay_margin_s=-9.876,
    cycle_length_s=61.234,
    growth_rate_per_s=0.0051,
    slow_root_per_s=None,
    duty_ratio=0.7052,
    apnoea_s=18.05,
    equilibrium={"PaCO2": 36.0},
    co2_reserve_mmhg=2.28,
    reasons={"slow_root_per_s": "No slow real root was found."},
)

CALM = replace(
    HUNTS,
    standing=Standing.SETTLES,
    sentence="Settles.",
    loop_gain=0.18,
    gain_margin=5.6,
    phase_margin_rad=None,
    duty_ratio=None,
    apnoea_s=None,
    reasons={"phase_margin_rad": "The loop's gain is under 1 at every frequency.", "duty_ratio": "No hunt.", "apnoea_s": "No hunt."},
)


class Page(html.parser.HTMLParser):
    """Text, rows of cells, tags that are left open, and every address that a browser would ask for."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.words: list[str] = []
        self.rows: list[list[str]] = []
        self.asked: list[str] = []
        self.tags: list[str] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attributes):
        self.tags.append(tag)
        if tag not in ("meta", "img", "link", "br"):
            self.open.append(tag)
        if tag == "tr":
            self.rows.append([])
        if tag in ("td", "th"):
            self.rows[-1].append("")
        self.asked += [value for name, value in attributes if name in ("src", "href", "srcset", "data", "poster", "action")]

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if "style" not in self.open:
            self.words.append(data)
        if self.open and self.open[-1] in ("td", "th"):
            self.rows[-1][-1] += data

    @property
    def text(self) -> str:
        return " ".join(self.words)


def page(**changes) -> Page:
    return Page(report_html(Report(**{"case": CASE, "analysis": HUNTS, **changes})))


def test_the_report_is_well_formed_and_asks_for_nothing_outside_itself():
    text = report_html(Report(CASE, HUNTS, pictures=(Picture("<svg xmlns='http://www.w3.org/2000/svg'/>", "A map"),)))
    made = Page(text)
    assert made.open == []
    assert all(address.startswith("data:") for address in made.asked) and len(made.asked) == 1
    assert "script" not in made.tags and "link" not in made.tags and "@import" not in text and not re.search(r"url\(", text)
    assert "default-src 'none'" in text


def test_the_report_says_the_standing_the_version_and_the_caution():
    made = page()
    assert HUNTS.sentence in made.text and f"Lagscape {VERSION}" in made.text
    assert made.text.count(CAUTION) == 2


def test_every_figure_has_its_unit_and_a_missing_one_its_reason():
    rows = {row[0]: row[1] for row in page(analysis=CALM).rows if len(row) == 2}
    assert rows["Loop gain"] == "0.180" and rows["Delay margin"] == "−9.88 s" and rows["Cycle length"] == "61.2 s"
    assert rows["Phase margin"] == "– (The loop's gain is under 1 at every frequency.)"
    assert {row[0]: row[1] for row in page().rows if len(row) == 2}["Phase margin"] == "−28.6 degrees"


def test_every_number_stands_there_with_unit_basis_and_spread():
    rows = {row[1]: row for row in page().rows if len(row) == 6}
    for name, number in CASE.numbers.items():
        item = CASE.specifications[name]
        row = rows[f"{item.label} ({item.symbol})"]
        assert row[2] == f"{figure(number.value)} {item.unit}".rstrip()
        assert row[3].endswith(str(number.basis))
    assert rows["Resting PaCO2 (P0)"][2:5] == ["36.0 mmHg", "● measured", "1.0 mmHg"]


def test_pressures_follow_the_readers_unit():
    rows = {row[1]: row for row in page(pressure_unit="kPa").rows if len(row) == 6}
    # Oracle: 36 mmHg / 7.50062 = 4.80 kPa; a gain of 1.5 L/min/mmHg is 11.3 L/min/kPa.
    assert rows["Resting PaCO2 (P0)"][2] == "4.80 kPa"
    assert rows["Peripheral CO2 gain (Sp)"][2] == "11.3 L/min/kPa"


def test_the_link_in_the_report_is_the_whole_case():
    made = page(address="https://intranet.example/lagscape/#old")
    link = next(word for word in made.words if word.startswith("https://"))
    assert link.startswith("https://intranet.example/lagscape/#L1.") and Case.from_link(link) == CASE
    bare = next(word for word in page().words if word.startswith("L1."))
    assert Case.from_link(bare) == CASE


def test_levers_stand_with_dose_effect_and_caution_and_the_standing_before_and_after():
    line = LeverLine("Oxygen", "2 L/min", "loop gain −31 %", "Watch the PaCO2.", "Wellman 2008, Respir Physiol Neurobiol 162:144")
    made = page(analysis=CALM, without_levers=HUNTS, levers=(line,), cautions=("In heart failure, mind the trial.",))
    assert ["Oxygen", "2 L/min", "loop gain −31 %", "Watch the PaCO2."] in made.rows
    assert ["Loop gain", "1.46", "0.180"] in made.rows
    words = " ".join(made.text.split())
    assert f"Without levers: {HUNTS.sentence}" in words and f"With levers: {CALM.sentence}" in words
    assert "In heart failure, mind the trial." in made.text and line.source in made.text


def test_a_lever_without_words_is_named_as_the_case_names_it():
    made = page(case=CASE.with_levers(LeverSetting("oxygen_l_min", 2.0)))
    assert ["oxygen l min", "2.00"] in made.rows


def test_only_the_methods_used_are_cited():
    made = page()
    for name in METHODS:
        assert (METHODS[name] in made.text) == (name in methods_used(CASE, HUNTS))
    assert "duty_ratio" not in methods_used(CASE, HUNTS) and "duty_ratio" in methods_used(CASE, HUNTS, measured=True)
    assert "cycle" in methods_used(CASE, HUNTS) and "cycle" not in methods_used(CASE, CALM)
    assert "hypoxia" not in methods_used(CASE, HUNTS)
    assert "hypoxia" in methods_used(CASE.with_number("arterial_po2_mmhg", 60.0), HUNTS)
    reflex = Case.typical("reflex")
    assert "clonus" in methods_used(reflex, replace(HUNTS, kind="reflex")) and "alveolar" not in methods_used(reflex, HUNTS)
    assert references(CASE, HUNTS, further=(METHODS["roots"], "Another.")) == (
        *(METHODS[name] for name in methods_used(CASE, HUNTS)), "Another.",
    )  # fmt: skip


def test_sources_are_given_for_the_typical_numbers_only():
    made = page()
    for name, number in CASE.numbers.items():
        item = CASE.specifications[name]
        assert (f"{item.label}: {item.source}" in made.text) == (number.basis is Basis.TYPICAL)


def test_a_measured_recording_stands_with_medians_and_quality_and_without_its_files_name():
    times = np.arange(0.0, 900.0, 0.1)
    envelope = np.clip(np.cos(2.0 * np.pi * times / 60.0) + 0.5, 0.0, None)
    table = "effort\n" + "\n".join(f"{value:.5f}" for value in envelope * np.sin(2.0 * np.pi * 0.25 * times))
    measured = measure_breathing(read_recording(table.encode(), name="Smith_John", sampling_frequency_hz=10.0), "effort")
    made = page(measurement=measured)
    rows = {row[0]: row[1] for row in made.rows if len(row) == 2}
    assert rows["Cycles used"] == f"{len(measured.used)} of {len(measured.cycles)}"
    assert f"Quality: {measured.quality}." in made.text and METHODS["duty_ratio"] in made.text
    assert "Smith" not in made.text
    table = measured.breath_table
    assert rows["Breaths"] == str(len(table)) and rows["Respiratory rate"].startswith("15.") and rows["Tidal volume"].endswith("median breath")
    assert f"Quality of the breaths: {table.quality.word}" in made.text and "in shares of the median breath" in made.text


def test_further_answers_and_pictures_stand_in_the_report():
    svg = '<svg xmlns="http://www.w3.org/2000/svg"><title>x</title></svg>'
    section = Section("Share of the excess", (("Delay", "61 %"), ("Sensitivity", "39 %")), "They add up to the whole.")
    made = page(pictures=(Picture(svg, "The map"),), sections=(section,))
    assert ["Delay", "61 %"] in made.rows and "They add up to the whole." in made.text
    picture = base64.b64decode(made.asked[0].partition("base64,")[2])
    assert ElementTree.fromstring(picture).tag.endswith("svg")


def test_words_that_look_like_markup_stay_words():
    made = page(analysis=replace(HUNTS, sentence="<script>alert(1)</script>"), cautions=("a < b & c",))
    assert "script" not in made.tags and "a < b & c" in made.text


@pytest.mark.parametrize("name", ["ankle-clonus", "plain-steep"])
def test_the_other_loops_have_reports_without_breathing_words(name):
    case = Case.from_starting_case(name)
    made = Page(report_html(Report(case, replace(HUNTS, kind=case.kind, sentence="Hunts."))))
    assert "CO2" not in made.text and "Apnoea" not in made.text
