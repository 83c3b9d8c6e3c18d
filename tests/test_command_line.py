"""The command line. Oracles: the library called directly, the JSON and CSV readers of the standard library, the exit codes' rule."""

import csv
import io
import json
import os
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest

from lagscape.case.case import Case, LeverSetting
from lagscape.command_line import main
from lagscape.questions.standing import Standing, analyse
from lagscape.version import VERSION

if sys.platform == "emscripten":
    pytest.skip("a browser has no processes and no command line", allow_module_level=True)

PROJECT = Path(__file__).parents[1]


def run(*arguments: str, text: str = "", **options) -> subprocess.CompletedProcess:
    environment = {**os.environ, "PYTHONPATH": str(PROJECT / "py"), "PYTHONWARNINGS": "error"}
    return subprocess.run(
        [sys.executable, "-m", "lagscape", *arguments], input=text, capture_output=True, text=True, env=environment, timeout=120, **options
    )


@pytest.fixture
def case_file(tmp_path) -> Path:
    path = tmp_path / "case.json"
    path.write_text(Case.from_starting_case("heart-failure-periodic").to_json(), encoding="utf-8")
    return path


def test_the_version_is_the_projects():
    assert tomllib.loads((PROJECT / "pyproject.toml").read_text())["project"]["version"] == VERSION
    done = run("--version")
    assert done.returncode == 0 and done.stdout == f"lagscape {VERSION}\n"


def test_analyse_prints_what_the_library_says(case_file):
    done = run("analyse", str(case_file))
    assert done.returncode == 0 and done.stderr == ""
    result = json.loads(done.stdout)
    assert result == json.loads(json.dumps(analyse(Case.from_starting_case("heart-failure-periodic")).to_json()))
    assert result["standing"] == "hunts"
    assert abs(result["loop_gain"] - open_loop_gain_by_hand()) <= 1e-5


def open_loop_gain_by_hand() -> float:
    """|L| where L is real and negative, read off a fine scan of the open loop of that starting case, written out here.

    L = E P0 (Sp e^(-s tau_p) + Sc e^(-s tau_c) / (1 + s T_c)) / (V_L s + q + E V_E - q k / (s + k)), flows a second, q = 863 beta Q,
    k = Q / V_T. The scan's step of 2e-7 rad/s moves |L| by less than 1e-5.
    """
    share, rest, production, flow = 0.7, 36.0, 0.20, 3.0
    blood, washout = 863.0 * 0.0065 * flow / 60.0, flow / 60.0 / 15.0
    s = 1j * np.arange(0.09, 0.12, 2e-7)
    plant = 2.0 * s + blood + 863.0 * production / rest / 60.0 - blood * washout / (s + washout)
    gain = share * rest / 60.0 * (1.5 * np.exp(-24.3 * s) + 1.5 * np.exp(-28.0 * s) / (1.0 + 90.0 * s)) / plant
    return float(abs(gain[np.argmin(np.abs(np.angle(-gain)))]))


@pytest.mark.parametrize("name", ["healthy-asleep", "ankle-calm", "plain-steep"])
def test_a_missing_margin_is_null_with_a_reason_beside_it(name, capsys, tmp_path):
    path = tmp_path / "case.json"
    path.write_text(Case.from_starting_case(name).to_json())
    assert main(["analyse", str(path)]) == 0
    result = json.loads(capsys.readouterr().out)
    for figure in ("standing", "loop_gain", "gain_margin", "phase_margin_rad", "delay_margin_s", "cycle_length_s", "growth_rate_per_s"):
        assert result[figure] is not None or result["reasons"][figure]
    assert result["equilibrium"]


def test_analyse_reads_standard_input(case_file):
    assert json.loads(run("analyse", "-", text=case_file.read_text()).stdout)["standing"] == "hunts"


def test_a_cohort_goes_in_and_out_row_by_row(tmp_path):
    table = "starting_case,peripheral_delay_s\nheart-failure-periodic,\nheart-failure-periodic,2000\nhealthy-asleep,8\n"
    path = tmp_path / "cases.csv"
    path.write_text(table)
    done = run("cohort", str(path))
    assert done.returncode == 0 and done.stderr == ""
    rows = list(csv.DictReader(io.StringIO(done.stdout)))
    assert [row["row"] for row in rows] == ["1", "2", "3"]
    assert rows[0]["standing"] == "hunts" and rows[0]["error"] == ""
    assert rows[1]["standing"] == "" and "must be a number from 2 to 60 s; got 2000." in rows[1]["error"]
    expected = analyse(Case.from_starting_case("healthy-asleep"))
    assert rows[2]["standing"] == str(expected.standing) == str(Standing.SETTLES)
    assert float(rows[2]["loop_gain"]).hex() == float(expected.loop_gain).hex()
    assert run("cohort", "-", text=table).stdout == done.stdout


def test_a_cohort_fails_only_where_every_row_fails():
    done = run("cohort", "-", text="lung_volume_l\n99\n")
    assert done.returncode == 2
    assert done.stderr == "lagscape: No row of the cohort could be read; the column error says why for each.\n"
    assert "Lung gas volume must be a number" in done.stdout
    assert run("cohort", "-", text="lung_volume_l\n").returncode == 0


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["analyse", "no-such-file.json"], "lagscape: no-such-file.json cannot be read: No such file or directory.\n"),
        (["analyse", "."], "lagscape: . cannot be read: Is a directory.\n"),
        (["analyse"], "lagscape analyse: the following arguments are required: CASE.json; try --help.\n"),
        (["cohort", "no-such-file.csv"], "lagscape: no-such-file.csv cannot be read: No such file or directory.\n"),
        (["measure", "no-such-file.csv", "--signal", "x"], "no-such-file.csv"),
        (["measure", "x.csv", "--signal", "x", "--window", "5", "late"], "must be a number from 0 up, got 'late'; try --help.\n"),
        (["measure", "x.csv"], "the following arguments are required: --signal; try --help.\n"),
        (["weigh"], "invalid choice: 'weigh'"),
        ([], "the following arguments are required: COMMAND; try --help.\n"),
    ],
)
def test_a_mistake_is_one_sentence_and_exit_code_two(arguments, sentence, capsys, monkeypatch, tmp_path):
    monkeypatch.chdir(tmp_path)
    try:
        code = main(arguments)
    except SystemExit as ended:
        code = ended.code
    said = capsys.readouterr()
    assert code == 2 and said.out == ""
    assert sentence in said.err and said.err.count("\n") == 1 and "Traceback" not in said.err


def test_a_broken_case_is_one_sentence_and_exit_code_two():
    done = run("analyse", "-", text='{"format": "lagscape-case", "version": 99}')
    assert done.returncode == 2 and done.stdout == ""
    assert done.stderr == "lagscape: The case has version 99, and this Lagscape reads up to version 1; open it in a newer Lagscape.\n"


def test_an_unknown_lever_is_one_sentence_and_exit_code_two():
    done = run("analyse", "-", text=Case.typical("breathing").with_levers(LeverSetting("magic_l_min", 1.0)).to_json())
    assert done.returncode == 2 and done.stdout == "" and done.stderr.count("\n") == 1
    assert done.stderr.startswith("lagscape: The case cannot be read: The breathing loop has no lever 'magic_l_min'; it has: ")


def test_a_lever_changes_what_analyse_says():
    case = Case.from_starting_case("heart-failure-periodic")
    laid = case.with_levers(LeverSetting("oxygen_l_min", 2.0))
    result = json.loads(run("analyse", "-", text=laid.to_json()).stdout)
    assert result["levers"] == [{"name": "oxygen_l_min", "dose": 2.0}]
    # Oxygen takes from the peripheral gain, so the loop gain must fall.
    assert result["loop_gain"] == analyse(laid).loop_gain < analyse(case).loop_gain


def test_a_case_that_allows_no_rest_is_one_sentence_and_exit_code_two():
    case = Case.typical("reflex").with_number("held_mass_kg", 20.0).with_number("load_distance_m", 1.0)
    done = run("analyse", "-", text=case.to_json())
    assert done.returncode == 2 and done.stderr.startswith("lagscape: The held load asks for more torque") and done.stderr.count("\n") == 1


def test_a_reader_that_leaves_early_is_no_complaint(case_file):
    command = [sys.executable, "-m", "lagscape", "analyse", str(case_file)]
    environment = {**os.environ, "PYTHONPATH": str(PROJECT / "py")}
    reading, writing = os.pipe()
    os.close(reading)
    done = subprocess.run(command, stdout=writing, stderr=subprocess.PIPE, env=environment, timeout=120)
    os.close(writing)
    assert done.returncode == 0 and done.stderr == b""


@pytest.fixture
def periodic_effort(tmp_path) -> Path:
    """Twenty minutes of breaths at 0.25 Hz that wax and wane every 60 s and stop for 20 s of each: 10 samples a second, no time column."""
    times = np.arange(0.0, 1200.0, 0.1)
    envelope = np.clip(np.cos(2.0 * np.pi * times / 60.0) + 0.5, 0.0, None)
    path = tmp_path / "effort.csv"
    path.write_text("effort\n" + "\n".join(f"{value:.5f}" for value in envelope * np.sin(2.0 * np.pi * 0.25 * times)) + "\n")
    return path


def test_measure_prints_the_cycles_of_a_known_recording(periodic_effort):
    done = run("measure", str(periodic_effort), "--signal", "effort", "--sampling-frequency", "10")
    assert done.returncode == 0 and done.stderr == ""
    result = json.loads(done.stdout)
    # Oracle: the recording's own construction. Tolerance: 2 % of a cycle, what the measurement promises.
    assert abs(result["cycle_length_s"]["median"] - 60.0) <= 1.2
    assert 18 <= result["cycles_used"] <= 20 and len(result["cycles"]) == result["cycles_found"]
    assert result["window_s"] == [0.0, 1200.0]


def test_measure_looks_only_into_the_window(periodic_effort, capsys):
    arguments = ["measure", str(periodic_effort), "--signal", "effort", "--sampling-frequency", "10", "--window", "300", "720"]
    assert main(arguments) == 0
    result = json.loads(capsys.readouterr().out)
    assert result["window_s"] == [300.0, 720.0]
    assert all(300.0 - 60.0 <= cycle["start_s"] <= 720.0 for cycle in result["cycles"]) and 4 <= result["cycles_found"] <= 7


def test_measure_writes_every_breath_on_request(periodic_effort, tmp_path, capsys):
    path = tmp_path / "breaths.csv"
    arguments = ["measure", str(periodic_effort), "--signal", "effort", "--sampling-frequency", "10", "--breaths", str(path)]
    assert main(arguments) == 0
    result = json.loads(capsys.readouterr().out)["breaths"]
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == result["found"]
    # Oracle: the recording's own construction, 0.25 Hz for 40 s of every 60 s: 10 breaths a cycle, of which the smallest at either
    # end lie under the threshold.
    assert 20 * 7 <= len(rows) <= 20 * 10
    assert abs(np.median([float(row["rate_per_min"]) for row in rows]) - 15.0) < 0.4
    assert float(np.median([float(row["tidal_volume_median_breath"]) for row in rows])) == result["tidal_volume"]["median"] == 1.0


def test_breaths_that_cannot_be_written_or_are_none_are_one_sentence(periodic_effort, tmp_path, capsys):
    arguments = ["measure", str(periodic_effort), "--signal", "effort", "--sampling-frequency", "10", "--breaths"]
    assert main([*arguments, str(tmp_path / "nowhere" / "breaths.csv")]) == 2
    assert "breaths.csv cannot be written: No such file or directory." in capsys.readouterr().err
    assert main([*arguments, str(tmp_path / "breaths.csv"), "--kind", "tremor"]) == 2
    assert "a tremor has none" in capsys.readouterr().err


def test_measure_says_which_channels_there_are(periodic_effort, capsys):
    assert main(["measure", str(periodic_effort), "--signal", "flow", "--sampling-frequency", "10"]) == 2
    assert "'effort'" in capsys.readouterr().err


def test_measure_finds_the_peak_of_a_known_tremor(tmp_path, capsys):
    times = np.arange(0.0, 60.0, 0.01)
    noise = np.random.default_rng(1).standard_normal((2, times.size))
    axes = 2.0 * np.sin(2.0 * np.pi * 6.2 * times) * np.array([[1.0], [0.5]]) + 0.2 * noise
    path = tmp_path / "limb.csv"
    path.write_text("x,y\n" + "\n".join(f"{a:.5f},{b:.5f}" for a, b in axes.T) + "\n")
    assert main(["measure", str(path), "--signal", "x", "--signal", "y", "--kind", "tremor", "--sampling-frequency", "100"]) == 0
    result = json.loads(capsys.readouterr().out)
    # Oracle: the recording's own construction. Tolerance: half a line of the 8 s analysis, 1/16 Hz.
    assert abs(result["peak_frequency_hz"] - 6.2) <= 1.0 / 16.0
    assert result["signals"] == ["x", "y"] and result["kind"] == "tremor" and result["window_s"] == [0.0, 60.0]
    assert len(result["power"]) == len(result["frequency_hz"]) > 100
    assert main(["measure", str(path), "--signal", "x", "--signal", "y", "--sampling-frequency", "100"]) == 2
    assert capsys.readouterr().err == "lagscape: Breathing is measured on one signal; got 2.\n"


def test_what_measure_prints_does_not_say_what_the_file_is_called(tmp_path, periodic_effort, capsys):
    named = periodic_effort.rename(tmp_path / "Smith_John_1950.csv")
    assert main(["measure", str(named), "--signal", "effort", "--sampling-frequency", "10"]) == 0
    assert "smith" not in capsys.readouterr().out.lower()


def test_help_says_what_the_tool_is_not(capsys):
    with pytest.raises(SystemExit):
        main(["--help"])
    assert "Not a medical device." in " ".join(capsys.readouterr().out.split())
