"""The two documents against the project: what README shows is run, what it lists is counted, every file DEVELOPERS names is there.

Oracles: the program itself, run as a reader would run it; the project's own tables of levers, limits, arrows and versions.
"""

from __future__ import annotations

import importlib.util
import math
import os
import re
import shutil
import subprocess
import sys
import tomllib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from lagscape.case.case import Case, LeverSetting
from lagscape.command_line import CAUTION, main
from lagscape.loops.register import LOOPS
from lagscape.questions.levers import LEVERS
from lagscape.questions.model_limits import MODEL_LIMITS
from lagscape.questions.standing import analyse, judge
from lagscape.version import VERSION

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
PROSE = " ".join(README.split())

# A figure must come out the same on another machine and with another numpy; roots and crossovers are polished to 1e-10 or better, cycles
# of a recording rest on single-precision samples.
RELATIVE = 1e-6
NUMBER = re.compile(r"-?\d+(?:\.\d+)?(?:e[-+]?\d+)?")


@dataclass(frozen=True)
class Block:
    """A fenced block: its language, the file name beside it (or nothing), its text."""

    language: str
    name: str
    text: str


def blocks(document: str) -> list[Block]:
    found = re.findall(r"^```(\w+) ?(\S*)\n(.*?)^```$", document, re.MULTILINE | re.DOTALL)
    return [Block(*parts) for parts in found]


def commands(language: str) -> list[str]:
    """The lines of README's blocks of plain commands."""
    return [line for block in blocks(README) if block.language == language for line in block.text.splitlines()]


def section(document: str, heading: str) -> str:
    """What stands under a heading, up to the next of the same level or higher."""
    level = heading.split(" ")[0]
    rest = document.split(f"\n{heading}\n", 1)[1]
    return re.split(rf"^#{{2,{len(level)}}} ", rest, maxsplit=1, flags=re.MULTILINE)[0]


def rows(text: str) -> list[list[str]]:
    """The body of the only table in a text, cell by cell."""
    lines = [line for line in text.splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in re.split(r"(?<!\\)\|", line)[1:-1]] for line in lines[2:]]


def assert_same_output(shown: str, printed: str) -> None:
    """The words to the letter, the numbers to RELATIVE."""
    assert NUMBER.sub("#", printed).split() == NUMBER.sub("#", shown).split(), f"README shows\n{shown}\nbut it prints\n{printed}"
    for wanted, got in zip(NUMBER.findall(shown), NUMBER.findall(printed), strict=True):
        assert float(got) == pytest.approx(float(wanted), rel=RELATIVE), f"README shows {wanted}, it prints {got}"


# ---- README ----------------------------------------------------------------------------------------------------------------------
def test_readme_opens_with_the_job_in_one_paragraph_then_the_caution() -> None:
    title, job, caution = README.split("\n\n")[:3]
    assert title == "# Lagscape"
    who = ("clinical physiologist", "clinical neurophysiologist", "browser tab")
    for word in (*who, "settle, ring or hunt", "to blame", "quiet it", "how sure", "hands the case"):
        assert word in " ".join(job.split()), word
    assert caution.startswith("**Caution.** ")
    for words in ("Decision support for qualified staff, not a medical device.", "Local protocols and licensed practice decide."):
        assert words in " ".join(caution.split())
    # The same two statements that the program prints.
    assert CAUTION == "Decision support for qualified staff. Not a medical device."


def test_every_example_prints_what_readme_shows(tmp_path: Path) -> None:
    """Runs the examples from top to bottom in one folder, as a reader would: files saved, Python run, commands run."""
    if shutil.which("sh") is None:
        pytest.skip("the examples use a Unix shell")
    programs = tmp_path / "bin"
    programs.mkdir()
    (programs / "python3").symlink_to(sys.executable)
    environment = {**os.environ, "PYTHONPATH": str(ROOT / "py"), "PYTHONWARNINGS": "error", "PATH": f"{programs}{os.pathsep}{os.environ['PATH']}"}

    def run(*words: str) -> str:
        done = subprocess.run(words, cwd=tmp_path, env=environment, capture_output=True, text=True, timeout=60)
        assert done.returncode == 0 and done.stderr == "", f"{words[-1]}\n{done.stderr}"
        return done.stdout

    waiting: str | None = None
    counted = {"python": 0, "console": 0, "file": 0}
    for block in blocks(README):
        if block.language == "text":
            assert waiting is not None, "an output stands without its program"
            assert_same_output(block.text, waiting)
            waiting = None
            continue
        assert waiting is None, "a Python example has no output beside it"
        if block.name:
            (tmp_path / block.name).write_text(block.text, encoding="utf-8")
            counted["file"] += 1
        elif block.language == "python":
            waiting = run(sys.executable, "-c", block.text)
            counted["python"] += 1
        elif block.language == "console":
            for entry in block.text.split("$ ")[1:]:
                command, _, shown = entry.partition("\n")
                assert_same_output(shown, run("sh", "-c", command))
                counted["console"] += 1
        else:
            assert block.language == "sh", f"README has a block of {block.language} that no test reads"
    assert counted["python"] >= 2 and counted["console"] >= 3 and counted["file"] == 2


@pytest.mark.parametrize(
    ("shown", "printed"),
    [("loop gain 1.47", "loop gain 1.48"), ("hunts 1.47", "rings 1.47"), ('"a": 1.0', '"a": 1.0, "b": 2.0'), ("-1.5 s", "1.5 s")],
)
def test_a_stale_example_is_caught(shown: str, printed: str) -> None:
    with pytest.raises(AssertionError):
        assert_same_output(shown, printed)


BUILD_COMMANDS = sorted({line for line in commands("sh") if "build_scripts/" in line})


def test_readme_names_the_two_commands_first() -> None:
    assert commands("sh")[:2] == ["python3 build_scripts/serve.py", "python3 build_scripts/test.py"]
    known = ("python3 build_scripts/", "python3 -m lagscape ", "python3 -m pip install .")
    assert all(line.startswith(known) for line in commands("sh")), "a command that no test parses"


@pytest.mark.parametrize("script", sorted({line.split()[1] for line in BUILD_COMMANDS}))
def test_a_build_command_has_the_options_that_readme_shows(script: str) -> None:
    done = subprocess.run([sys.executable, str(ROOT / script), "--help"], capture_output=True, text=True, timeout=60)
    assert done.returncode == 0
    for line in BUILD_COMMANDS:
        words = line.split()
        if words[1] == script:
            own = words[2 : words.index("--")] if "--" in words else words[2:]
            assert all(word in done.stdout for word in own if word.startswith("--")), line
            assert "--" not in words or "pytest" in done.stdout


LAGSCAPE_COMMANDS = [line for line in commands("sh") if line.startswith("python3 -m lagscape ")]


@pytest.mark.parametrize("line", LAGSCAPE_COMMANDS)
def test_a_command_line_in_readme_runs(line: str, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    # The files that it names are made here: a movement of 6 Hz in noise on three axes, and breaths that wax and wane every 60 s.
    import numpy as np

    rng = np.random.default_rng(1)
    time = np.arange(0.0, 60.0, 0.01)
    axes = np.outer(np.sin(2.0 * math.pi * 6.0 * time), (1.0, 0.5, 0.2)) + 0.05 * rng.standard_normal((time.size, 3))
    lines = "".join(f"{t:.2f},{x:.5f},{y:.5f},{z:.5f}\n" for t, (x, y, z) in zip(time, axes, strict=True))
    (tmp_path / "hand.csv").write_text("time_s,x,y,z\n" + lines, encoding="utf-8")
    breaths = np.arange(0.0, 600.0, 1.0 / 32.0)
    effort = np.maximum(0.0, 0.2 + np.sin(2.0 * math.pi * breaths / 60.0)) * np.sin(2.0 * math.pi * 0.3 * breaths)
    (tmp_path / "chest.txt").write_text("effort\n" + "".join(f"{value:.4f}\n" for value in effort), encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    assert main(line.split()[3:]) == 0
    printed = capsys.readouterr().out
    if "tremor" in line:
        # Oracle: the frequency that was put in; tolerance a tenth of the spectrum's 8-second resolution.
        found = re.search(r'"peak_frequency_hz": ([\d.]+)', printed)
        assert found is not None and abs(float(found.group(1)) - 6.0) < 0.0125
    else:
        # Oracle: the cycle that was put in; tolerance 2 %, as the recordings' own tests have it.
        found = re.search(r'"cycle_length_s": \{\s*"median": ([\d.]+)', printed)
        assert found is not None and abs(float(found.group(1)) / 60.0 - 1.0) < 0.02


def test_readme_shows_a_command_of_each_kind() -> None:
    shown = " ".join([*LAGSCAPE_COMMANDS, *(line for line in README.splitlines() if line.startswith("$ "))])
    for command in ("analyse", "measure", "cohort", "--kind tremor", "--signal", "--window", "--sampling-frequency"):
        assert command in shown, command


def test_readme_names_every_lever_and_the_public_surface() -> None:
    import lagscape

    levers = section(README, "## What it does").split("**Levers.**")[1].split("**Certainty.**")[0]
    words = " ".join(levers.split()).lower()
    assert [lever.label for known in LEVERS.values() for lever in known.values() if lever.label.lower() not in words] == []
    for name in lagscape.__all__:
        assert name == "__version__" or f"`{name}`" in README, name
    count = {2: "two", 11: "eleven"}
    for kind, words_after in (("breathing", "invented persons who breathe"), ("reflex", "ankles")):
        number = len(LOOPS[kind].starting_cases)
        assert f"{count.get(number, number)} {words_after}" in PROSE, f"{number} starting cases of {kind}"


def test_the_figures_in_readme_s_prose_are_the_program_s() -> None:
    from lagscape.app.workbench import OPENING_CASE
    from lagscape.case.case_link import LONGEST_LINK
    from lagscape.questions.certainty import DRAWS
    from lagscape.questions.enough import SAFE_GAIN_MARGIN
    from lagscape.recordings.loop_gain import loop_gain_from_duty_ratio

    assert f'such as "{analyse(Case.from_starting_case(OPENING_CASE)).sentence}"' in PROSE
    assert f"drawn {DRAWS:,} times" in PROSE
    assert f"that you choose ({SAFE_GAIN_MARGIN:g} at first)" in PROSE
    assert f"in under {LONGEST_LINK:,} characters" in PROSE
    # The library example's loop: by the open loop, and by the duty ratio that the example prints.
    gain = analyse(Case.from_starting_case("heart-failure-periodic").with_number("peripheral_delay_s", 27.0)).loop_gain
    assert f"they are {gain:.2f} and {loop_gain_from_duty_ratio(0.633):.2f} for the same loop" in PROSE


def limits_table() -> str:
    """The table of model limits as README must hold it."""
    lines = ["| figure | published | model | source | why |", "|---|---|---|---|---|"]
    for item in MODEL_LIMITS:
        unit = f" {item.unit}" if item.unit else ""
        lines.append(f"| {item.what} | {item.published_text} | {item.model:.3g}{unit} | {item.source} | {item.why} |")
    return "\n".join(lines).replace("+-", "±")


def test_the_table_of_model_limits_is_that_of_the_program() -> None:
    shown = "\n".join(line for line in section(README, "## What it does not do").splitlines() if line.startswith("|"))
    assert shown == limits_table(), f"put this table into README:\n{limits_table()}"


def gain_ratio(name: str, lever: str, dose: float) -> float:
    case = Case.from_starting_case(name)
    before, after = analyse(case).loop_gain, analyse(case.with_levers(LeverSetting(lever, dose))).loop_gain
    assert before and after
    return after / before


def lung_volume_slope() -> float:
    case = Case.from_starting_case("heart-failure-periodic")
    volume = case.value("lung_volume_l")
    small, large = (judge(case.with_number("lung_volume_l", volume * share)).margins.loop_gain for share in (0.99, 1.01))
    assert small and large
    return math.log(small / large) / math.log(1.01 / 0.99)


def reserve_rise() -> float:
    case = Case.from_starting_case("heart-failure-periodic")
    before, after = analyse(case).co2_reserve_mmhg, analyse(case.with_levers(LeverSetting("acetazolamide_mg_day", 1000.0))).co2_reserve_mmhg
    assert before and after
    return after - before


def printed_split_cycle() -> float:
    case = Case.from_starting_case("heart-failure-periodic")
    numbers = {"peripheral_gain_l_min_mmhg": 0.58, "central_gain_l_min_mmhg": 5.8, "central_delay_s": 26.0, "central_time_constant_s": 60.0}
    for name, value in numbers.items():
        case = case.with_number(name, value)
    frequency = judge(case).margins.phase_crossover_frequency
    assert frequency
    return 2.0 * math.pi / frequency


AGAIN: dict[str, Callable[[], float]] = {
    "lung_volume_slope": lung_volume_slope,
    "lateral_posture_loop_gain": lambda: gain_ratio("heart-failure-periodic", "lateral_posture_share", 1.0),
    "acetazolamide_loop_gain": lambda: gain_ratio("heart-failure-periodic", "acetazolamide_mg_day", 1000.0),
    "acetazolamide_co2_reserve": reserve_rise,
    "acetazolamide_plant_gain_able_bodied": lambda: (32.3 / 40.1) ** 2,
    "oxygen_peripheral_heavy": lambda: gain_ratio("heart-failure-periodic", "oxygen_l_min", 2.0),
    "oxygen_central_heavy": lambda: gain_ratio("idiopathic-central-apnoea", "oxygen_l_min", 2.0),
    "printed_gain_split_cycle": printed_split_cycle,
}


@pytest.mark.parametrize("index", range(len(MODEL_LIMITS)), ids=[item.name for item in MODEL_LIMITS])
def test_a_number_in_the_table_of_limits_is_what_the_program_gives(index: int) -> None:
    # README's own figure, read from its text. Tolerance: it has three significant figures.
    shown = float(rows(section(README, "## What it does not do"))[index][2].split()[0])
    assert AGAIN[MODEL_LIMITS[index].name]() == pytest.approx(shown, rel=5e-3)


def test_version_and_change_list_agree() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    headings = re.findall(r"^### (\d+\.\d+\.\d+)$", section(README, "## Changes"), re.MULTILINE)
    assert headings[0] == VERSION == project["version"]
    assert headings == sorted(headings, key=lambda text: tuple(map(int, text.split("."))), reverse=True)
    assert section(README, f"### {VERSION}").count("\n- ") >= 3


# ---- DEVELOPERS, and both ----------------------------------------------------------------------------------------------------------
MADE_BY_THE_BUILD = {"dist/", ".venv", ".venv/", ".cache", ".cache/", "lib-*", "app-*", "files.json", "scipy.bundle"}


def named_paths(document: str) -> set[str]:
    """What stands in backticks and looks like a file or a folder of this project."""
    plain = re.sub(r"^```.*?^```$", "", document, flags=re.MULTILINE | re.DOTALL)
    spoken = [name for words in re.findall(r"`([^`\n]+)`", plain) for name in words.split()]
    kept = {name for name in spoken if re.fullmatch(r"\.?[\w.-]+(/[\w.-]+)*/?", name)}
    return {name for name in kept if name.endswith("/") or re.search(r"[\w-]\.(py|js|mjs|json|md|toml|txt|html|css)$", name)} - MADE_BY_THE_BUILD


def there(name: str) -> bool:
    """A path from the top; or, for a bare name beside its folder's, a file of that name anywhere in the project."""
    if (ROOT / name).exists():
        return True
    folders = [ROOT / folder for folder in ("py", "web", "build_scripts", "tests")]
    return "/" not in name and any(next(folder.rglob(name), None) is not None for folder in folders)


EXAMPLE_FILES = {block.name for block in blocks(README) if block.name}


def test_every_file_named_in_the_documents_exists() -> None:
    assert not there("py/lagscape/engine/nonsense.py") and not there("nonsense.py")
    named = named_paths(DEVELOPERS)
    assert len(named) > 50
    assert sorted(name for name in named | (named_paths(README) - EXAMPLE_FILES) if not there(name)) == []
    for command in re.findall(r"`python3? ([^`]+)`", DEVELOPERS + README):
        words = command.split()
        if words[0] == "-m" and words[1] != "pip":
            assert importlib.util.find_spec(words[1]) is not None, command
        elif words[0] != "-m":
            assert (ROOT / words[0]).is_file(), command


def test_the_arrows_are_those_that_are_enforced() -> None:
    from test_architecture import MAY_IMPORT

    shown = {part.strip("`"): set(re.findall(r"`(\w+)`", targets)) for part, targets in rows(section(DEVELOPERS, "## Arrows"))}
    assert shown == MAY_IMPORT


def test_every_name_of_the_symbol_table_is_in_the_code() -> None:
    sources = "\n".join(path.read_text(encoding="utf-8") for path in (ROOT / "py").rglob("*.py"))
    words = set(re.findall(r"[A-Za-z_]\w*", sources))
    names = [name for row in rows(section(DEVELOPERS, "## Symbols")) for name in re.findall(r"`(\w+)`", row[2])]
    assert len(names) > 40
    assert [name for name in names if name not in words] == []


def test_boot_stages_and_topics_are_those_of_the_code() -> None:
    # Oracle: the stages as the page lists them, the topics as the workbench does.
    page = (ROOT / "web" / "page_state.js").read_text(encoding="utf-8")
    stages = re.findall(r'^  \["(\w+)", "[^"]+"\],$', page.split("const STAGES = [")[1].split("];")[0], re.MULTILINE)
    assert len(stages) == 6
    assert "`" + "`, `".join(stages) + "`" in " ".join(DEVELOPERS.split())
    bench = (ROOT / "py" / "lagscape" / "app" / "workbench.py").read_text(encoding="utf-8")
    topics = re.findall(r"^    (\w+) {2,}\S", bench.split("Topics a view may listen to:")[1].split('"""')[0], re.MULTILINE)
    assert len(topics) == 5
    assert "`" + "`, `".join(topics) + "`" in " ".join(DEVELOPERS.split())
