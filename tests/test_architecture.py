"""The architecture is a list, and these tests read the code by it."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import profileplan
from profileplan.inputs import LAW_NAMES
from profileplan.motion.laws import LAWS

ROOT = Path(profileplan.__file__).parent

ORDER = (
    "lazy",
    "errors",
    "inputs",
    "geometry",
    "motion",
    "dynamics",
    "setpoints",
    "checks",
    "results",
    "wording",
    "summary",
    "report",
    "planning",
    "cli",
    "__main__",
)
"""Rooms of the house from the ground up: each imports only from itself and from those before it."""

WITHIN = {
    "motion": (
        "polynomials",
        "trajectory",
        "laws",
        "synchronisation",
        "schedule",
        "spline",
        "rounds",
        "guesses",
        "least_time",
        "paths",
    ),
    "checks": (
        "findings",
        "ways",
        "traces",
        "clearance",
        "motors",
        "schedules",
        "table_extremes",
        "table_digits",
        "table_cubics",
        "table_turns",
        "table_twins",
        "table_axes",
        "table_notes",
        "table_clearance",
        "tables",
    ),
    "geometry": (
        "corridor",
        "shapes",
        "curves",
        "primitives",
        "splines",
        "document",
        "entities",
        "blocks",
        "drawing",
        "overlaps",
        "outlines",
        "cell",
        "clearance",
        "transfer",
        "detour",
        "exchanges",
        "order",
        "listing",
        "picture",
        "sleeve",
        "deviation",
        "trace",
    ),
    "cli": ("frame", "tables", "settings", "remarks", "jobs", "exports", "drawings", "pictures"),
    "report": (
        "extra",
        "curves",
        "scene",
        "loads",
        "picture_rows",
        "picture_style",
        "picture_views",
        "picture_sheet",
        "pictures",
        "rows",
        "notebook",
        "facts",
        "timeline",
        "page",
    ),
    "planning": ("plan", "tasks", "rides", "steps", "transfers", "matching", "traces", "cycle"),
}
"""Modules of a room from the ground up."""

OPENERS = {"inputs", "setpoints", "report"}
"""The rooms that open files."""

HEAVY = ("numpy", "scipy", "shapely", "ezdxf", "tabulate", "matplotlib")
"""Libraries that cost start-up time."""

LONGEST_FILE, LONGEST_FUNCTION = 600, 60

MODULES = sorted(ROOT.rglob("*.py"))


def imported(file: Path) -> set[str]:
    """Return the project's modules that a file imports anywhere, seen from the package."""
    found = set()
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module == "profileplan":
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and (node.module or "").startswith("profileplan."):
            found.add((node.module or "").removeprefix("profileplan."))
    return found


def name_of(file: Path) -> str:
    """Return a module's dotted name seen from the package."""
    return ".".join(file.relative_to(ROOT).with_suffix("").parts)


@pytest.mark.parametrize("file", MODULES, ids=name_of)
def test_imports_run_one_way(file: Path) -> None:
    """Whoever reads a room needs to know only the rooms below it."""
    room = name_of(file).split(".")[0]
    if room == "__init__":
        return
    below = ORDER[: ORDER.index(room) + 1]
    rooms = {module.split(".")[0] for module in imported(file)} - {"__version__"}
    assert rooms <= set(below), f"{name_of(file)} imports from rooms above it"


@pytest.mark.parametrize("room", WITHIN)
def test_modules_of_a_room_import_one_way(room: str) -> None:
    """The order in the contributor's guide holds inside the rooms too."""
    order = WITHIN[room]
    for file in sorted((ROOT / room).glob("*.py")):
        if file.stem == "__init__":
            continue
        own = {m.split(".")[1] for m in imported(file) if m.startswith(f"{room}.")}
        below = set(order[: order.index(file.stem)])
        assert own <= below, f"{name_of(file)} imports from modules above it"


def test_checks_know_no_planner() -> None:
    """A check that shares code with what it judges proves nothing."""
    makers = {"motion.laws", "motion.synchronisation", "planning"}
    for file in (ROOT / "checks").glob("*.py"):
        assert not makers & set(imported(file)), file.name


def test_a_trajectory_knows_no_law() -> None:
    """The checks judge by trajectories, so these must not depend on what made them."""
    for name in ("trajectory", "schedule", "polynomials"):
        assert "motion.laws" not in imported(ROOT / "motion" / f"{name}.py")


def test_files_are_opened_in_few_places() -> None:
    """A reader of files must know where to look for half-written ones."""
    calls = {"open", "read_text", "read_bytes", "write_text", "write_bytes", "mkstemp", "fdopen"}
    for file in MODULES:
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call):
                target = node.func
                name = target.attr if isinstance(target, ast.Attribute) else ""
                name = target.id if isinstance(target, ast.Name) else name
                if name in calls and "devnull" not in ast.dump(node):
                    assert name_of(file).split(".")[0] in OPENERS, f"{name_of(file)}: {name}"


@pytest.mark.parametrize("file", MODULES, ids=name_of)
def test_files_and_functions_stay_short(file: Path) -> None:
    """What fits on a page can be read once from top to bottom."""
    text = file.read_text(encoding="utf-8")
    assert len(text.splitlines()) <= LONGEST_FILE
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.FunctionDef):
            first = node.body[1] if ast.get_docstring(node) and len(node.body) > 1 else node.body[0]
            length = (node.end_lineno or 0) - first.lineno + 1
            assert length <= LONGEST_FUNCTION, f"{name_of(file)}: {node.name}"


def loaded(code: str) -> set[str]:
    """Return the modules that a fresh interpreter has loaded after some code."""
    report = f"{code}\nimport sys\nprint('\\n'.join(sys.modules))"
    result = subprocess.run(
        [sys.executable, "-c", report], capture_output=True, text=True, check=True
    )
    return set(result.stdout.split())


RUN = """
import contextlib, io
from profileplan.cli import cli
with contextlib.redirect_stdout(io.StringIO()), contextlib.redirect_stderr(io.StringIO()):
    try:
        cli.main({words!r})
    except SystemExit as stop:
        assert stop.code == {status}, stop.code
"""


@pytest.mark.parametrize(
    "words",
    [["--help"], *([name, "--help"] for name in ("plan", "check", "export", "outline", "plot"))],
)
def test_help_loads_no_heavy_library(words: list[str]) -> None:
    """Help that makes one wait is not read."""
    assert not set(HEAVY) & loaded(RUN.format(words=words, status=0))


def test_a_faulty_file_is_refused_before_numpy_is_loaded(tmp_path: Path) -> None:
    """A typing mistake is reported at once."""
    file = tmp_path / "cycle.toml"
    file.write_text("targett = 3\n")
    assert not set(HEAVY) & loaded(RUN.format(words=["plan", str(file)], status=2))


def test_planning_loads_only_what_it_needs() -> None:
    """Drawings and solvers cost more start-up than all else together."""
    modules = loaded("import profileplan; profileplan.plan")
    assert "numpy" in modules
    assert not {"scipy", "shapely", "ezdxf", "tabulate", "click"} & modules


def test_the_package_imports_nothing_at_start() -> None:
    """``import profileplan`` costs nothing until a name is used."""
    assert {m for m in loaded("import profileplan") if m.startswith("profileplan")} == {
        "profileplan"
    }


def test_the_public_names_are_pinned() -> None:
    """The stub that type checkers read and the lazy list are the same, and all names load."""
    stub = ast.parse((ROOT / "__init__.pyi").read_text(encoding="utf-8"))
    names = [
        alias.name for node in stub.body if isinstance(node, ast.ImportFrom) for alias in node.names
    ]
    assert sorted([*names, "__version__"]) == dir(profileplan)
    for name in names:
        assert getattr(profileplan, name).__doc__, f"{name} has no docstring"


def test_law_names_of_files_and_laws_agree() -> None:
    """A name that a file may use must have a law behind it."""
    assert tuple(LAWS) == LAW_NAMES
