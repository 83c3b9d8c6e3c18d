"""The house rules that a machine can check: which part may know which, what lies where, versions, sizes and words.

Oracle: the house as the design lays it out. Each rule is tried on a made-up breach too, so that it is known to catch one.
"""

from __future__ import annotations

import ast
import json
import re
import subprocess
import sys
import tomllib
from functools import cache
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "py" / "lagscape"

MAY_IMPORT = {
    "errors": set(),
    "units": {"errors"},
    "version": set(),
    "quantities": {"errors", "units"},
    "case": {"errors", "units", "loops"},
    "loops": {"errors", "units", "case"},
    "engine": {"errors", "units", "loops"},
    "recordings": {"errors", "units"},
    "questions": {"errors", "units", "quantities", "case", "loops", "engine", "recordings"},
    "handover": {"errors", "units", "quantities", "version", "case", "loops", "engine", "recordings", "questions"},
    "cohort": {"errors", "units", "version", "case", "loops", "questions", "handover"},
    "surface": {"errors", "units", "case", "engine", "questions"},
    "command_line": {"errors", "units", "version", "surface", "case", "recordings", "questions", "handover", "cohort"},
    "app": {"errors", "units", "quantities", "version", "case", "loops", "engine", "recordings", "questions", "handover", "lagscape"},
}
"""Part of the package to the other parts that it may import."""

ONLY_THESE = {
    ("case", "loops"): {"lagscape.loops.register", "lagscape.loops.gases"},
    ("loops", "case"): {"lagscape.case.parameters"},
    ("engine", "loops"): {"lagscape.loops.protocol"},
}
"""Of these arrows these modules alone: cases know the register and the formulas of gases, which know no loop; the engine knows the
shape of a loop and no physiology; loops know what a parameter is."""

BROWSER_MODULES = {"js", "pyodide", "pyodide_js", "panel", "bokeh", "param"}
DRAG_PATH = ("lagscape.questions.standing", "lagscape.engine.simulate", "lagscape.engine.boundary", "lagscape.loops.register", "lagscape.case.case")

TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "py", "web", "tests", "build_scripts"}

LONGEST_FILE = 500
"""Lines. A file is one concept and aims at under 400; over 500 it needs its reason below."""

LONGER: dict[str, str] = {}
"""Files over LONGEST_FILE lines, each with the reason why it is still one concept."""


def tracked() -> list[str]:
    """Paths under version control, and those that would be added, relative to the root."""
    run = subprocess.run(["git", "ls-files", "--cached", "--others", "--exclude-standard"], cwd=ROOT, capture_output=True, text=True, check=True)
    return [name for name in run.stdout.splitlines() if (ROOT / name).is_file()]


@cache
def text_of(name: str) -> str:
    return (ROOT / name).read_text(encoding="utf-8", errors="replace")


def imported(source: str, module: str) -> list[str]:
    """Every module that a module's source imports, anywhere in it, in full; `from x import y` gives x, and x.y if x is a package."""
    found: list[str] = []
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                parent = module.split(".")[: -node.level]
                base = ".".join([*parent, *([node.module] if node.module else [])])
            found += [f"{base}.{alias.name}" if _is_package(base) else base for alias in node.names]
    return found


def _is_package(module: str) -> bool:
    return module.split(".")[0] == "lagscape" and (ROOT / "py" / Path(*module.split("."))).is_dir()


def part_of(module: str) -> str:
    """The part of the package that a module belongs to; "lagscape" for the package itself."""
    name = module.partition(".")[2].split(".")[0]
    known = name and ((PACKAGE / name).is_dir() or (PACKAGE / f"{name}.py").is_file())
    return name if known else "lagscape"


def modules() -> dict[str, str]:
    """Module name to source of the whole package."""
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        names = path.relative_to(ROOT / "py").with_suffix("").parts
        found[".".join(names[:-1] if names[-1] == "__init__" else names)] = path.read_text(encoding="utf-8")
    return found


def wrong_arrows(module: str, source: str) -> list[str]:
    """Imports of a module that the house forbids."""
    own = part_of(module)
    wrong = []
    for target in imported(source, module):
        if target.split(".")[0] != "lagscape":
            continue
        other = part_of(target)
        if other == own or own not in MAY_IMPORT:
            continue
        only = ONLY_THESE.get((own, other))
        allowed = other in MAY_IMPORT[own] and (only is None or any(target == name or target.startswith(f"{name}.") for name in only))
        if not allowed:
            wrong.append(f"{module} imports {target}")
    return wrong


def test_every_part_of_the_package_has_its_arrows_laid_down() -> None:
    parts = {part_of(module) for module in modules()} - {"lagscape", "__main__"}
    assert parts <= set(MAY_IMPORT), f"say in MAY_IMPORT what these may know: {sorted(parts - set(MAY_IMPORT))}"


def test_arrows_point_one_way() -> None:
    assert [line for module, source in modules().items() for line in wrong_arrows(module, source)] == []


@pytest.mark.parametrize(
    ("module", "source"),
    [
        ("lagscape.engine.roots", "from lagscape.loops.breathing import BreathingLoop"),
        ("lagscape.loops.plain", "def f():\n    import lagscape.engine.simulate"),
        ("lagscape.questions.share", "from lagscape.app import state"),
        ("lagscape.loops.plain", "from ..engine import roots"),
        ("lagscape.recordings.envelope", "from lagscape.case.case import Case"),
    ],
)
def test_a_wrong_arrow_is_caught(module: str, source: str) -> None:
    assert len(wrong_arrows(module, source)) == 1


def test_only_the_app_knows_the_browser() -> None:
    wrong = [
        f"{module} imports {target}"
        for module, source in modules().items()
        if part_of(module) != "app"
        for target in imported(source, module)
        if target.split(".")[0] in BROWSER_MODULES
    ]
    assert wrong == []


@pytest.mark.parametrize("module", DRAG_PATH)
def test_the_drag_path_imports_no_scipy(module: str) -> None:
    # In a fresh process: scipy costs seconds and megabytes in the browser, so it may come only when a recording or a fit asks for it.
    code = f"import sys, {module}; print([name for name in sys.modules if name.split('.')[0] in ('scipy', 'pandas')])"
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env={"PYTHONPATH": str(ROOT / "py")}, check=True)
    assert run.stdout.strip() == "[]"


def test_scipy_is_never_imported_at_the_top_of_a_module() -> None:
    def tops(source: str) -> list[str]:
        nodes = [node for node in ast.parse(source).body if isinstance(node, (ast.Import, ast.ImportFrom))]
        return [name for node in nodes for name in imported(ast.unparse(node), "x") if name.split(".")[0] == "scipy"]

    assert tops("import scipy.signal as signal") == ["scipy.signal"]
    assert {module: found for module, source in modules().items() if (found := tops(source))} == {}


def test_the_top_level_holds_only_what_the_card_allows() -> None:
    top = {name.split("/")[0] for name in tracked()}
    assert {name for name in top if not name.startswith(".")} <= TOP_LEVEL


def test_the_shell_holds_no_equation() -> None:
    # The page knows nothing of the physiology: none of its words and no function of mathematics stands in web/.
    words = re.compile(
        r"\b(paco2|vco2|chemoreflex|ventilation|loop_?gain|apnoea|hypoxi\w*|tidal|spectral|sensitivit\w*"
        r"|Math\.(exp|log|sin|cos|tan|tanh|sqrt|pow))\b",
        re.IGNORECASE,
    )
    assert words.search("const gain = Math.exp(-x);") and words.search("PaCO2")
    scripts = [name for name in tracked() if name.startswith("web/") and name.endswith((".js", ".html", ".css"))]
    assert scripts
    assert [(name, found.group()) for name in scripts if (found := words.search(text_of(name)))] == []


def test_no_file_is_longer_than_one_concept_needs() -> None:
    sources = [name for name in tracked() if name.endswith((".py", ".js", ".mjs", ".css", ".html"))]
    lines = {name: text_of(name).count("\n") + 1 for name in sources}
    too_long = {name: count for name, count in lines.items() if count > LONGEST_FILE and name not in LONGER}
    assert too_long == {}, f"over {LONGEST_FILE} lines without a reason in LONGER"
    assert [name for name in LONGER if lines.get(name, 0) <= LONGEST_FILE] == [], "no longer so long: take the name out of LONGER"


def test_no_large_file_is_tracked() -> None:
    assert [name for name in tracked() if (ROOT / name).stat().st_size > 1024 * 1024] == []


# The forbidden words are put together here, so that this file does not hold them itself.
WORDS = [
    "tran" + "script", "lec" + "ture", "seed doc" + "ument", "the spea" + "ker", "this ses" + "sion", "/wo" + "rk/", "/ro" + "ot/",
    "py" + "pi.org", "python" + "hosted.org", "npm" + "js.org", "npm" + "js.com", "deb." + "debian.org",
]  # fmt: skip


def test_words_that_do_not_belong_in_the_product() -> None:
    pattern = re.compile("|".join(map(re.escape, WORDS)), re.IGNORECASE)
    assert pattern.search("see the Lec" + "ture")
    found = []
    for name in tracked():
        if name.endswith((".png", ".ico", ".woff2")):
            continue
        found += [(name, hit.group()) for hit in pattern.finditer(text_of(name))]
    assert found == []


def versions_in(requirements: Path) -> dict[str, str]:
    lines = [line.strip() for line in requirements.read_text(encoding="utf-8").splitlines()]
    return {_plain(name): version for name, _, version in (line.partition("==") for line in lines if line and line[0] != "#")}


def _plain(name: str) -> str:
    return re.sub(r"[-_.]+", "-", name).lower()


def all_pins() -> dict[str, dict[str, str]]:
    """Every place that pins versions of packages, with what it pins."""
    scripts = ROOT / "build_scripts"
    pins = {path.name: versions_in(path) for path in sorted(scripts.glob("*requirements.lock.txt"))}
    for path in sorted(scripts.glob("*wheels.lock.json")):
        wheels = json.loads(path.read_text(encoding="utf-8"))["wheels"]
        pins[path.name] = {_plain(name): entry["version"] for name, entry in wheels.items()}
    runtime = json.loads((scripts / "runtime.lock.json").read_text(encoding="utf-8"))
    pins["runtime.lock.json"] = {_plain(name): entry["version"] for name, entry in runtime["packages"].items()}
    return pins


def test_every_package_has_one_version_wherever_it_is_pinned() -> None:
    pins = all_pins()
    assert len(pins) >= 5
    seen: dict[str, dict[str, str]] = {}
    for place, versions in pins.items():
        for name, version in versions.items():
            seen.setdefault(name, {})[place] = version
    assert {name: places for name, places in seen.items() if len(set(places.values())) > 1} == {}
    assert len(seen["numpy"]) >= 2 and len(seen["pytest"]) >= 2


def test_a_wheel_lock_names_the_file_of_its_version() -> None:
    for path in (ROOT / "build_scripts").glob("*wheels.lock.json"):
        for name, entry in json.loads(path.read_text(encoding="utf-8"))["wheels"].items():
            assert f"-{entry['version']}-" in entry["file"], name
            assert re.fullmatch(r"[0-9a-f]{64}", entry["sha256"]), name


def test_the_runtime_s_wheels_are_those_of_its_lock() -> None:
    lock = json.loads((ROOT / "build_scripts" / "runtime.lock.json").read_text(encoding="utf-8"))
    assert lock["version"] == lock["info"]["version"]
    for entry in lock["packages"].values():
        assert lock["files"][entry["file_name"]]["sha256"] == entry["sha256"]


def test_the_program_s_version_stands_in_one_place_and_its_copy_agrees() -> None:
    from lagscape.version import VERSION

    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    if "version" in project:
        assert project["version"] == VERSION
    else:
        assert "version" in project["dynamic"]


def test_tests_are_not_hollow() -> None:
    # A test without an assertion cannot fail: every test function asserts, expects a raise, or calls a checker whose name says so.
    def hollow(source: str) -> list[str]:
        names = []
        for node in ast.walk(ast.parse(source)):
            if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef)) and node.name.startswith("test_"):
                body = ast.unparse(node)
                if not re.search(r"\bassert\b|pytest\.(raises|warns|fail)|assert_\w+\(|\.validate\(|expect\(|\bcheck\w*\(|wait_for\w*\(", body):
                    names.append(node.name)
        return names

    assert hollow("def test_x():\n    compute()") == ["test_x"]
    found = {name: bad for name in tracked() if name.startswith("tests/") and name.endswith(".py") and (bad := hollow(text_of(name)))}
    assert found == {}
