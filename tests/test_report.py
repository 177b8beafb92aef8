"""The page as a file: whole, by itself, the same for the same plan, and honest about what it says.

What it does in a browser is in ``test_report_browser.py``.
"""

from __future__ import annotations

import base64
import hashlib
import json
import re
import sys
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from ezdxf.filemanagement import new
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import profileplan as pp
from profileplan.cli import cli
from profileplan.report import brief, curves, timeline
from profileplan.report.page import page
from profileplan.report.scene import Scene

ROOT = Path(__file__).parents[1]

KILN = ROOT / "samples" / "kiln-loader" / "cycle.toml"

TURNER = ROOT / "samples" / "tile-turner" / "cycle.toml"

VOID = {"area", "base", "br", "col", "hr", "img", "input", "link", "meta", "source", "wbr"}


class Outline(HTMLParser):
    """Notes the elements that are open, their texts, and what is not closed in order."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.wrong: list[str] = []
        self.links: list[str] = []
        self.texts: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        """Note an element, and what it refers to."""
        self.links += [value or "" for name, value in attrs if name in {"src", "href"}]
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        """Note an end that does not belong to the innermost element."""
        if not self.open or self.open.pop() != tag:
            self.wrong.append(tag)

    def handle_data(self, data: str) -> None:
        """Note what is read: not scripts and styles."""
        if not self.open or self.open[-1] not in {"script", "style"}:
            self.texts.append(data)

    @property
    def text(self) -> str:
        """All that is read, with single spaces."""
        return " ".join(" ".join(self.texts).split())


def read(text: str) -> Outline:
    """Return a page as a parser sees it."""
    found = Outline()
    found.feed(text)
    found.close()
    return found


def data_of(text: str) -> dict[str, object]:
    """Return the plain values that the page carries."""
    start = text.index('type="application/json">') + len('type="application/json">')
    found: dict[str, object] = json.loads(text[start : text.index("</script>", start)])
    return found


@pytest.fixture(scope="module")
def kiln() -> pp.Plan:
    """Return the plan of a sample."""
    return pp.plan(KILN)


def test_the_same_plan_gives_the_same_bytes(kiln: pp.Plan, tmp_path: Path) -> None:
    """Two engineers who compare pages must see differences of the plan alone."""
    kiln.report(tmp_path / "one.html")
    pp.plan(KILN).report(tmp_path / "two.html")
    assert (tmp_path / "one.html").read_bytes() == (tmp_path / "two.html").read_bytes()
    kiln.report(tmp_path / "dated.html", date="2031-05-06")
    assert "2031-05-06" in (tmp_path / "dated.html").read_text(encoding="utf-8")
    assert "2031-05-06" not in (tmp_path / "one.html").read_text(encoding="utf-8")


def test_the_page_is_whole_and_by_itself(kiln: pp.Plan) -> None:
    """Elements end in order, and nothing is loaded from anywhere else."""
    found = read(page(kiln))
    assert not found.wrong
    assert not found.open
    assert all(link.startswith(("#", "data:")) for link in found.links), found.links


def test_the_page_says_what_the_plan_says(kiln: pp.Plan) -> None:
    """Verdict, every step, every requirement, the machine's data, the files with their SHA-256."""
    text = read(page(kiln)).text
    assert f"{kiln.duration:.3f} s" in text
    for step in kiln.steps:
        assert f"{step.name} {step.kind} {step.start:.3f} {step.duration:.3f}" in text, step.name
    for finding in kiln.check():
        assert f"{finding.axis or ''} {finding.check}".strip() in text
    for axis in kiln.job.machine.axes:
        assert f"{axis.velocity:g} mm/s" in text
    for file in (KILN, KILN.with_name("machine.toml")):
        assert hashlib.sha256(file.read_bytes()).hexdigest() in text, file
    assert "Risk assessment, guarding and the local codes are for qualified people." in text
    assert "The views show the way of the first" not in text, "they show all of it"
    assert pp.__version__ in text


def test_what_is_not_met_is_said_first() -> None:
    """Of a plan that misses its target the first screen says so, with by how much."""
    plan = pp.plan(TURNER)
    text = read(page(plan)).text
    top = text[: text.index("Timeline Timeline") if "Timeline Timeline" in text else 1500]
    assert "✕ No: 1 of 44 not met" in top
    assert "0.100 s too long" in top
    assert "not judged" in top, "nothing is known of motors and keep-outs"


@pytest.mark.parametrize("name", ["</script><script>x()", "a & b <i>", '" onload="x', "ä→𝄞"])
def test_names_are_text_and_nothing_else(name: str) -> None:
    """A name from a file must not act in the page."""
    machine = pp.Machine(name, (pp.Axis("x", travel=(0, 500), velocity=500, acceleration=4000),))
    cycle = pp.Cycle(steps=(pp.Move({"x": 300.0}, name=name),), start={"x": 0.0})
    plan = pp.plan(machine, cycle)
    text = page(plan)
    found = read(text)
    assert not found.wrong
    assert name in found.text
    steps = data_of(text)["steps"]
    assert isinstance(steps, list)
    assert steps[0]["name"] == name
    assert text.count("<script") == 4
    shown = read(brief(plan))
    assert not shown.wrong
    assert name in shown.text


def numbers(text: object, kind: str = "<f8") -> np.ndarray:
    """Return the numbers of a base64 text."""
    assert isinstance(text, str)
    return np.frombuffer(base64.b64decode(text), dtype=kind)


def test_the_motion_enters_as_it_is(kiln: pp.Plan) -> None:
    """The polynomials of the page are the plan's own, to the last bit."""
    packed = data_of(page(kiln))["motion"]
    assert isinstance(packed, dict)
    own = kiln.trajectory
    assert np.array_equal(numbers(packed["breaks"]), own.breaks)
    shape = (own.durations.size, packed["powers"], len(own.axes))
    assert np.array_equal(
        numbers(packed["coefficients"]).reshape(shape), own.coefficients[:, : packed["powers"]]
    )
    assert not own.coefficients[:, packed["powers"] :].any()


def shuttle(count: int) -> pp.Plan:
    """Return a cycle of many short moves, of which one is faster than all others."""
    axis = pp.Axis("x", travel=(0, 500), velocity=900, acceleration=9000, jerk=300_000)
    ways = [5.0 if k % 2 else 0.0 for k in range(1, count + 1)]
    ways[count // 3] = 120.0
    steps = tuple(pp.Move({"x": way}) for way in ways)
    return pp.plan(pp.Machine("shuttle", (axis,)), pp.Cycle(steps=steps, start={"x": 0.0}))


def test_a_long_motion_is_reduced_without_losing_a_peak(monkeypatch: pytest.MonkeyPatch) -> None:
    """The least and greatest values are exact: compared with the exact peaks of the whole."""
    plan = shuttle(400)
    monkeypatch.setattr(curves, "MOST_NUMBERS", 1000)
    packed = data_of(page(plan))["motion"]
    assert isinstance(packed, dict)
    times = numbers(packed["times"])
    low, high = (numbers(packed[key], "<f4").reshape(-1, 4, 1) for key in ("low", "high"))
    assert len(low) == curves.STRETCHES == times.size - 1
    for order in range(4):
        lowest, highest = plan.trajectory.extremes(order)
        assert low[:, order].min() == pytest.approx(lowest.value.item(), rel=1e-6, abs=1e-6)
        assert high[:, order].max() == pytest.approx(highest.value.item(), rel=1e-6, abs=1e-6)
    assert "every" in read(page(plan)).text


@settings(max_examples=30, deadline=None)
@given(
    st.lists(st.floats(-100, 100), min_size=2, max_size=6, unique=True),
    st.integers(1, 60),
)
def test_an_envelope_holds_the_motion(positions: list[float], stretches: int) -> None:
    """In every stretch no sample of position, velocity, acceleration or jerk is beyond it."""
    axis = pp.Axis("x", travel=(-200, 200), velocity=400, acceleration=3000, jerk=50_000)
    steps = tuple(pp.Move({"x": x}) for x in positions[1:])
    plan = pp.plan(pp.Machine("m", (axis,)), pp.Cycle(steps=steps, start={"x": positions[0]}))
    found = curves.envelope(plan.trajectory, stretches)
    assert found.low.shape == (stretches, 4, 1)
    times = np.linspace(0, plan.duration, 2000)[:-1]
    stretch = np.clip(np.searchsorted(found.times, times, side="right") - 1, 0, stretches - 1)
    for order in range(4):
        values = plan.trajectory.at(times, order)
        room = 1e-9 * np.abs(values).max() + 1e-9
        assert np.all(values >= found.low[stretch, order] - room)
        assert np.all(values <= found.high[stretch, order] + room)


@settings(max_examples=50, deadline=None)
@given(st.integers(2, 3000), st.integers(1, 50), st.integers(0, 2**32 - 1))
def test_thinned_curves_keep_least_and_greatest(count: int, stretches: int, seed: int) -> None:
    """So few samples show all peaks; both ends stay."""
    values = np.random.default_rng(seed).normal(size=count)
    times = np.arange(count, dtype=np.float64)
    kept, shown = curves.thinned(times, values, stretches)
    assert kept.size <= max(2 * stretches + 2, min(count, 2 * stretches))
    assert shown.max() == values.max()
    assert shown.min() == values.min()
    assert (kept[0], kept[-1]) == (times[0], times[-1])
    assert np.all(np.diff(kept) > 0)
    assert np.array_equal(shown, values[kept.astype(int)])


def test_a_plan_command_writes_the_page(tmp_path: Path) -> None:
    """With -o there is a page beside table and summary, whatever the exit status."""
    result = CliRunner().invoke(cli, ["plan", str(TURNER), "-o", str(tmp_path)])
    assert result.exit_code == 1
    assert "wrote setpoints.csv, summary.json and report.html" in result.stderr
    found = read((tmp_path / "report.html").read_text(encoding="utf-8"))
    assert "Kiln loader with turning gripper" in found.text


@pytest.mark.parametrize("library", ["bokeh", "jinja2"])
def test_without_the_libraries_the_rest_is_written(
    library: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Table and summary need no browser; a line says how to get the page."""
    monkeypatch.setitem(sys.modules, library, None)
    result = CliRunner().invoke(cli, ["plan", str(KILN), "-o", str(tmp_path)])
    assert result.exit_code == 0
    assert (
        f"no report.html: {library} not found: pip install 'profileplan[report]'" in result.stderr
    )
    assert sorted(file.name for file in tmp_path.iterdir()) == ["setpoints.csv", "summary.json"]
    with pytest.raises(pp.InputError, match="profileplan\\[report\\]"):
        pp.plan(TURNER).report(tmp_path / "x.html")


def test_a_page_that_cannot_be_written_is_told(kiln: pp.Plan, tmp_path: Path) -> None:
    """A missing folder ends in a message with the file's name."""
    with pytest.raises(pp.InputError, match=r"x\.html"):
        kiln.report(tmp_path / "missing" / "x.html")


def test_a_notebook_shows_verdict_and_steps(kiln: pp.Plan) -> None:
    """It is short, and has neither scripts nor styles."""
    shown = kiln._repr_html_()
    found = read(shown)
    assert not found.wrong
    assert "cycle time 9.517 s; target 10.2 s met" in found.text
    assert "home" in found.text
    assert not re.search(r"<(script|style|link)", shown)
    assert len(shown) < 10_000


FLAT = {
    "one axis": (pp.Axis("x", travel=(0, 500), velocity=500, acceleration=4000),),
    "rotary axes only": (
        pp.Axis("c", kind="rotary", travel=(-180, 180), velocity=300, acceleration=900),
    ),
    "twelve axes": tuple(
        pp.Axis(f"a{k}", travel=(0, 500), velocity=500, acceleration=4000) for k in range(12)
    ),
}


@pytest.mark.parametrize("name", FLAT)
def test_any_machine_has_a_page(name: str) -> None:
    """Views that a machine has no axes for are left out."""
    axes = FLAT[name]
    cycle = pp.Cycle(
        steps=(pp.Wait(0.1), pp.Move({axis.name: 100.0 for axis in axes})),
        start={axis.name: 0.0 for axis in axes},
    )
    plan = pp.plan(pp.Machine(name, axes), cycle)
    found = read(page(plan))
    assert not found.wrong
    assert bool(Scene(plan).sides) == (name != "rotary axes only")


def test_heights_are_seen_as_the_machine_counts_them() -> None:
    """Where z counts downward the side view is turned over, and positions stay the machine's."""
    machine = replace(pp.read_machine(KILN.with_name("machine.toml")), up="-z")
    cycle = pp.Cycle(steps=(pp.Move({"z": 100.0}),), start={"x": 0.0, "y": 0.0, "z": 0.0})
    scene = Scene(pp.plan(machine, cycle))
    assert [(side.name, side.falls) for side in scene.sides] == [("plan", False), ("side", True)]
    assert_allclose(scene.extent[:, 2], [0, 100], atol=1e-9)


@pytest.mark.parametrize("tolerance", [0.02, 0.3, 1.0, 5.0, 60.0])
def test_deviations_are_magnified_as_far_as_the_view_has_room(tolerance: float) -> None:
    """The greatest round factor with room is offered: the series goes on by 2.5 at most."""
    axes = tuple(pp.Axis(n, travel=(0, 2000), velocity=500, acceleration=4000) for n in "xy")
    path = pp.PathStep(
        (pp.Waypoint({"x": 900.0}), pp.Waypoint({"x": 900.0, "y": 700.0})), tolerance=tolerance
    )
    cycle = pp.Cycle(steps=(path,), start={"x": 0.0, "y": 0.0})
    factors = Scene(pp.plan(pp.Machine("m", axes), cycle)).magnifications
    room = 0.02 * 900 / tolerance
    assert factors[0] == 1
    assert list(factors) == sorted(set(factors))
    assert factors[-1] <= max(room, 1.0)
    assert room < 2.5 * factors[-1]


def test_many_short_steps_are_in_the_timeline_together() -> None:
    """Of thousands of steps each is too narrow to be seen; none may be missing from the row."""
    plan = shuttle(1200)
    (lane,) = timeline.lanes(plan, Scene(plan))
    assert len(lane.blocks) <= timeline.MOST_BLOCKS
    covered = sum(block.end - block.start for block in lane.blocks)
    assert covered == pytest.approx(plan.duration)
    assert "move 1 … " in lane.blocks[0].text


def test_a_long_way_is_drawn_where_the_motion_is() -> None:
    """Few instants must not cut corners: between two of them the way is straight, by numpy."""
    axes = tuple(
        pp.Axis(name, travel=(0, 500), velocity=900, acceleration=9000, jerk=300_000)
        for name in "xy"
    )
    steps = tuple(
        pp.Move({"x": 400.0 * (k % 2), "y": 10.0 + 7 * (k % 50)}, name=f"go {k}")
        for k in range(1, 701)
    )
    plan = pp.plan(pp.Machine("wide", axes), pp.Cycle(steps=steps, start={"x": 0.0, "y": 0.0}))
    scene = Scene(plan)
    assert 2 * len(steps) < scene.times.size < 40 * len(steps)
    corners = scene.seen(plan.trajectory.at(scene.times))[:, :2]
    times = np.linspace(0, plan.duration, 20_001)
    first = np.clip(np.searchsorted(scene.times, times, side="right") - 1, 0, corners.shape[0] - 2)
    way = corners[first + 1] - corners[first]
    off = scene.seen(plan.trajectory.at(times))[:, :2] - corners[first]
    length = np.maximum(np.linalg.norm(way, axis=1), 1e-12)
    apart = np.abs(way[:, 0] * off[:, 1] - way[:, 1] * off[:, 0]) / length
    assert apart.max() < 1e-3 * scene.size
    assert "A long cycle" not in read(page(plan)).text, "the polynomials are all there"


def test_a_very_short_cycle_is_told_in_digits() -> None:
    """Half a millisecond is not 0.000 s, and the slider has steps within it."""
    axis = pp.Axis("x", travel=(0, 500), velocity=500, acceleration=4000)
    cycle = pp.Cycle(steps=(pp.Move({"x": 0.0002}),), start={"x": 0.0})
    plan = pp.plan(pp.Machine("nudge", (axis,)), cycle)
    text = page(plan)
    assert f"{plan.duration:.4g} s" in read(text).text
    step = re.search(r'id="scrub"[^>]* step="([^"]+)"', text)
    assert step is not None
    assert float(step[1]) <= plan.duration / 90


def test_small_outlines_are_magnified_less(tmp_path: Path) -> None:
    """Magnified bands of small outlines would cover each other, and the motion with them."""
    drawing = new(units=4)
    for k in range(4):
        drawing.modelspace().add_circle((20 + 100 * k, 20), 6)
    drawing.saveas(tmp_path / "dots.dxf")
    axes = tuple(pp.Axis(n, travel=(0, 500), velocity=500, acceleration=4000) for n in "xy")
    trace = pp.Trace(tmp_path / "dots.dxf", tolerance=0.05, speed=100)
    scene = Scene(pp.plan(pp.Machine("dots", axes), pp.Cycle((trace,), {"x": 0.0, "y": 0.0})))
    assert scene.magnifications[-1] * 0.05 < 6
