"""``profileplan plot`` and ``plan.plot()``: views and curves as a static picture."""

from __future__ import annotations

import io
import math
import subprocess
import sys
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING
from xml.etree import ElementTree as ET

import matplotlib as mpl
import numpy as np
import pytest
from click.testing import CliRunner, Result
from matplotlib.collections import LineCollection
from matplotlib.image import imread
from matplotlib.text import Text
from numpy.testing import assert_allclose

from profileplan import (
    Axis,
    Circle,
    Cycle,
    InputError,
    Keepout,
    Line,
    Machine,
    Move,
    PathStep,
    Payload,
    Tool,
    Wait,
    Waypoint,
    load_job,
    plan,
)
from profileplan.cli import cli
from profileplan.report import draw, write_picture
from profileplan.report.picture_rows import SAMPLES, curves_of
from profileplan.report.picture_style import WARM
from profileplan.report.picture_views import COLOURS, LEVELS, THICK, THIN, Looks
from profileplan.report.scene import Scene
from profileplan.summary import CAUTION

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D

    from profileplan import Plan

SAMPLE_JOBS = Path(__file__).parents[1] / "samples"
SVG = "{http://www.w3.org/2000/svg}"

A4_INCHES = (210 / 25.4, 297 / 25.4)
"""ISO 216: A4 is 210 mm by 297 mm (from memory)."""

MOST_BYTES = 2_000_000


def linear(name: str, jerk: float | None = None) -> Axis:
    """Return a linear axis of half a metre."""
    return Axis(name, travel=(0.0, 500.0), velocity=1000.0, acceleration=5000.0, jerk=jerk)


def rotary(name: str) -> Axis:
    """Return a rotary axis."""
    return Axis(
        name, kind="rotary", travel=(-180.0, 180.0), velocity=270.0, acceleration=1500.0, jerk=3e4
    )


@lru_cache
def sample(name: str) -> Plan:
    """Return the plan of a sample, made once."""
    if name.endswith(".csv"):
        machine = SAMPLE_JOBS / "kiln-loader" / "machine.toml"
        return plan(load_job(SAMPLE_JOBS / name, machine=machine, tolerance=5.0))
    return plan(load_job(SAMPLE_JOBS / name))


@lru_cache
def small(name: str) -> Plan:
    """Return the plan of a machine of a kind that no sample has."""
    dozen = [f"x{index}" for index in range(9)]
    turns = [f"r{index}" for index in range(3)]
    machines = {
        "one axis": Machine("feeder $x$ <b>", (linear("x"),)),
        "up alone": Machine("lift", (linear("z", 5e4),), up="+z"),
        "twelve axes": Machine("dozen", (*map(linear, dozen), *map(rotary, turns)), up="+x2"),
        "rotary": Machine("table", (rotary("a"), rotary("b"))),
        "flat": Machine(
            "flat",
            (linear("x"), linear("y")),
            tool=Tool(radius=20.0, margin=5.0),
            keepouts=(Keepout("far wall", outline=((400, 0), (480, 0), (480, 500), (400, 500))),),
        ),
        "down": Machine(
            "down",
            (linear("x"), linear("y"), linear("z")),
            up="-z",
            tool=Tool(radius=20.0, margin=5.0),
            keepouts=(Keepout("post", circle=Circle(250.0, 250.0, 30.0), top=300.0),),
        ),
    }
    ends = dict.fromkeys(dozen, 300.0) | dict.fromkeys(turns, 50.0)
    start = dict.fromkeys(ends, 0.0)
    points = (Waypoint({"x": 300.0, "y": 50.0}), Waypoint({"x": 350.0, "y": 400.0}))
    hold = Payload(mass=1.0, radius=40.0, below=30.0)
    cycles = {
        "one axis": Cycle((Move({"x": 300.0}), Move({"x": 10.0})), {"x": 0.0}, target=0.5),
        "up alone": Cycle((Move({"z": 300.0}), Wait(0.1)), {"z": 0.0}),
        "twelve axes": Cycle((Move(ends), Move(start, arrival="earliest")), start),
        "rotary": Cycle((Move({"a": 90.0, "b": -20.0}),), {"a": 0.0, "b": 0.0}),
        "flat": Cycle((PathStep(points, tolerance=20.0),), {"x": 50.0, "y": 50.0}),
        "down": Cycle(
            (hold, Move({"x": 400.0, "y": 300.0}), Line({"z": 200.0}), Payload()),
            {"x": 50.0, "y": 200.0, "z": 100.0},
        ),
    }
    return plan(machines[name], cycles[name])


@lru_cache
def drawn(name: str) -> Figure:
    """Return the picture of such a machine, drawn once."""
    return draw(small(name))


SMALL = ("one axis", "up alone", "twelve axes", "rotary", "flat", "down")


def panel(figure: Figure, title: str) -> Axes:
    """Return the axes whose title begins so."""
    (found,) = [axes for axes in figure.axes if axes.get_title(loc="left").startswith(title)]
    return found


def curve(axes: Axes) -> Line2D:
    """Return the line of the motion itself: the longest."""
    return max(axes.lines, key=lambda line: np.asarray(line.get_xdata()).size)


def numbers(line: Line2D) -> tuple[np.ndarray, np.ndarray]:
    """Return the coordinates of a line, (m,) each."""
    return np.asarray(line.get_xdata(), float), np.asarray(line.get_ydata(), float)


def run(*words: str) -> Result:
    """Run the command line in this process."""
    return CliRunner(env={"COLUMNS": "100"}).invoke(cli, ["plot", *words])


@pytest.mark.parametrize(
    ("name", "forms"),
    [
        ("tile-turner/cycle.toml", (".svg",)),
        ("kiln-loader/cycle.toml", (".png", ".svg", ".pdf")),
        ("glaze-inspection/pass.csv", (".svg",)),
        ("sealant-portal/gasket.toml", (".svg",)),
    ],
)
def test_samples_are_drawn_in_every_form(name: str, forms: tuple[str, ...], tmp_path: Path) -> None:
    """What is handed over must open elsewhere, be found by its words, and be small enough."""
    planned = sample(name)
    files = {form: tmp_path / f"picture{form}" for form in forms}
    for file in files.values():
        write_picture(planned, file)
        assert file.stat().st_size < MOST_BYTES
    words = {text.text for text in ET.parse(files[".svg"]).iter(f"{SVG}text")}  # noqa: S314
    assert CAUTION in words
    for axis in planned.job.machine.axes:
        assert f"{axis.name} position, {axis.unit}" in words
        assert f"{axis.name} velocity, {axis.unit}/s" in words
    assert any(f"cycle time {planned.duration:.3f} s" in (word or "") for word in words)
    if ".pdf" in forms:
        paper = files[".pdf"].read_bytes()
        assert paper.startswith(b"%PDF-")
        assert paper.rstrip().endswith(b"%%EOF")
    if ".png" in forms:
        pixels = imread(files[".png"])
        assert_allclose(np.array(pixels.shape[1::-1]) / 200, A4_INCHES, atol=0.01)
        # Mostly paper, and something on it.
        assert 0.6 < np.mean(pixels[..., :3] == 1.0) < 0.99


def test_the_same_plan_makes_the_same_bytes_wherever_it_is_drawn(tmp_path: Path) -> None:
    """A picture under version control changes only if the plan does, and nobody's settings do.

    The other process hashes differently, and shows that neither pyplot nor a screen is needed.
    """
    name = "tile-turner/cycle.toml"
    code = (
        "import sys\n"
        "from profileplan import load_job, plan\n"
        "from profileplan.report import write_picture\n"
        "planned = plan(load_job(sys.argv[1]))\n"
        "for file in sys.argv[2:]:\n"
        "    write_picture(planned, file)\n"
        "assert 'matplotlib.pyplot' not in sys.modules\n"
    )
    forms = (".png", ".svg", ".pdf")
    others = [str(tmp_path / f"other{form}") for form in forms]
    subprocess.run(
        [sys.executable, "-W", "error", "-c", code, str(SAMPLE_JOBS / name), *others],
        check=True,
        env={"PYTHONHASHSEED": "7", "PYTHONPATH": str(SAMPLE_JOBS.parent), "HOME": str(tmp_path)},
    )
    with mpl.rc_context({"font.size": 20.0, "axes.facecolor": "black", "svg.fonttype": "path"}):
        before = dict(mpl.rcParams)
        for form, other in zip(forms, others, strict=True):
            write_picture(sample(name), tmp_path / f"one{form}")
            assert (tmp_path / f"one{form}").read_bytes() == Path(other).read_bytes(), form
        assert dict(mpl.rcParams) == before


@pytest.mark.parametrize("name", SMALL)
def test_nothing_is_clipped_and_no_words_overlap(name: str) -> None:
    """Words that leave the sheet or lie on each other cannot be read."""
    planned = small(name)
    figure = drawn(name)
    figure.draw_without_rendering()
    assert sorted(figure.get_size_inches()) == pytest.approx(A4_INCHES, abs=0.01)
    sheet = figure.bbox
    seen = [
        (text.get_text(), box)
        for text in figure.findobj(Text)
        if text.get_visible() and text.get_text().strip()
        if (box := text.get_window_extent()).width > 1
    ]
    assert len(seen) > 10 * len(planned.job.machine.axes)
    for index, (words, box) in enumerate(seen):
        assert box.x0 >= 0, words
        assert box.y0 >= 0, words
        assert box.x1 <= sheet.x1, words
        assert box.y1 <= sheet.y1, words
        for others, other in seen[:index]:
            apart = box.x0 >= other.x1 or other.x0 >= box.x1
            apart = apart or box.y0 >= other.y1 or other.y0 >= box.y1
            assert apart, f"{words!r} lies on {others!r}"


@pytest.mark.parametrize("name", SMALL)
def test_every_axis_has_its_curves_over_the_whole_cycle(name: str) -> None:
    """An axis left out, or cut short, would be taken for one at rest."""
    planned = small(name)
    figure = drawn(name)
    for index, axis in enumerate(planned.job.machine.axes):
        for order, title in enumerate(("position", "velocity", "acceleration", "jerk")):
            axes = panel(figure, f"{axis.name} {title}")
            times, values = numbers(curve(axes))
            assert axes.get_xlim() == (0.0, planned.duration)
            assert_allclose((times[0], times[-1]), (0.0, planned.duration))
            inside = np.linspace(0.0, planned.duration, 97)[1:-1]
            away = np.abs(inside[:, np.newaxis] - planned.trajectory.breaks).min(axis=1) > 1e-6
            exact = planned.trajectory.at(inside[away], order)[:, index]
            scale = max(np.abs(values).max(), 1.0)
            assert_allclose(np.interp(inside[away], times, values) / scale, exact / scale, 0, 2e-3)


@pytest.mark.parametrize("count", [40, 400])
def test_a_narrow_peak_is_drawn_as_high_as_it_is(count: int) -> None:
    """A peak between two samples is the one that trips the drive.

    From rest to rest over a distance d without jerk limit the peak is √(a d): triangular velocity
    (common practice, no source). The motion takes a few hundred times as long as the peak.
    """
    steps = [Wait(1.0) if index % 2 else Move({"x": 1.0 + index % 4}) for index in range(2 * count)]
    steps[count] = Move({"x": 5.0 + steps[count - 2].to["x"]})  # type: ignore[union-attr]
    planned = plan(Machine("feeder", (linear("x"),)), Cycle(tuple(steps), {"x": 0.0}))
    assert (planned.trajectory.durations.size > SAMPLES) == (count == 400)
    _, values = numbers(curve(panel(draw(planned), "x velocity")))
    assert_allclose(values.max(), math.sqrt(5000.0 * 5.0), 1e-3)
    assert_allclose(np.abs(values).max(), planned.trajectory.peaks.velocity.value[0], 1e-3)


def test_limits_are_marked_where_they_are_reached() -> None:
    """What holds the cycle back must be seen, and not by colour alone."""
    planned = sample("kiln-loader/cycle.toml")
    axes = panel(draw(planned), "x velocity")
    marked = [line for line in axes.lines if line.get_color() == WARM and line.get_linewidth() > 2]
    thin = curve(axes).get_linewidth()
    assert all(line.get_linewidth() > 2 * thin for line in marked)
    seen = 0.0
    for line in marked:
        times, values = numbers(line)
        both = np.isfinite(values[1:]) & np.isfinite(values[:-1])
        seen += float(np.diff(times)[both].sum())
    times = np.linspace(0.0, planned.duration, 200_001)
    at = np.abs(planned.trajectory.at(times, 1)[:, 0]) >= 0.999 * 2000.0
    # Four stretches, whose ends are each known within a sample.
    assert_allclose(seen, at.mean() * planned.duration, atol=8 * planned.duration / SAMPLES)


def test_slowing_down_has_its_own_limit() -> None:
    """The belt is spared when it stops: the limit that is drawn must be that of the moment."""
    planned = sample("kiln-loader/cycle.toml")
    x = planned.job.machine.axes[0]
    acceleration = curves_of(planned)[0][2]
    times, values = acceleration.times, acceleration.values
    velocity = planned.trajectory.at(times, 1)[:, 0]
    slack = 1e-6 * x.limits.acceleration
    assert np.all(values >= acceleration.low - slack)
    assert np.all(values <= acceleration.high + slack)
    onward = velocity > 1.0
    assert np.any(onward)
    assert_allclose(acceleration.low[onward], -x.limits.deceleration)
    assert_allclose(acceleration.high[onward], x.limits.acceleration)


@pytest.mark.parametrize("name", ["flat", "down"])
def test_views_are_true_to_scale_and_height_is_upward(name: str) -> None:
    """A picture that is stretched, or upside down, misleads."""
    figure = drawn(name)
    figure.draw_without_rendering()
    scales = []
    for title in ("plan view", "side view")[: 1 + (name == "down")]:
        axes = panel(figure, title)
        box = axes.get_window_extent()
        scales += [
            box.width / abs(np.diff(axes.get_xlim())[0]),
            box.height / abs(np.diff(axes.get_ylim())[0]),
        ]
    assert_allclose(scales, scales[0], 1e-6)
    if name == "down":
        low, high = panel(figure, "side view").get_ylim()
        assert low > high


def test_the_smallest_clearance_is_drawn_where_it_is() -> None:
    """The gap is between the tool's rim and the wall, by plane geometry as long as it is told."""
    planned = small("flat")
    (finding,) = [own for own in planned.check() if own.check == "clearance"]
    axes = panel(drawn("flat"), "plan view")
    (gap,) = [line for line in axes.lines if line.get_marker() == "|"]
    ends = np.stack(numbers(gap), axis=1)
    assert finding.time is not None
    x = planned.trajectory.at([finding.time])[0, 0]
    # The rim of a round tool is drawn as a polygon.
    assert_allclose(np.linalg.norm(ends[1] - ends[0]), finding.value, atol=0.05)
    assert_allclose(sorted(ends[:, 0]), [x + 20.0, 400.0], atol=0.05)
    assert f"{finding.value:.2f} mm" in [text.get_text() for text in axes.texts]


def test_speed_is_told_by_width_as_well_as_by_colour() -> None:
    """Without colour vision, or in black and white, the fast and the slow must be told apart.

    Contrast to white: WCAG 2.1, relative luminance and contrast ratio, at least 3 for graphics
    (from memory).
    """
    planned = small("flat")
    (way,) = panel(drawn("flat"), "plan view").collections
    assert isinstance(way, LineCollection)
    widths = np.asarray(way.get_linewidth())
    assert_allclose((widths.min(), widths.max()), (THIN, THICK))
    assert THICK > 3 * THIN
    looks = Looks(Scene(planned))
    assert looks.levels.max() == LEVELS - 1
    times = np.linspace(0.0, planned.duration, 100_001)
    fastest = np.linalg.norm(planned.trajectory.at(times, 1), axis=1).max()
    assert_allclose(looks.scene.top_speed, fastest, 1e-4)
    shares = COLOURS[:, :3]
    light = np.where(shares <= 0.03928, shares / 12.92, ((shares + 0.055) / 1.055) ** 2.4)
    luminance = light @ [0.2126, 0.7152, 0.0722]
    assert np.all(1.05 / (luminance + 0.05) >= 3.0)
    assert np.all(np.diff(luminance) > 0)


def test_a_deviation_too_small_to_be_seen_is_drawn_larger() -> None:
    """The motion stays inside its band, magnified or not, and uses some of it."""
    planned = sample("glaze-inspection/pass.csv")
    scene = Scene(planned)
    factor = scene.magnifications[-1]
    axes = panel(draw(planned), f"inside the tolerance: deviations × {factor}")
    solid = [line for line in axes.lines if line.get_linestyle() == "-"]
    moved = np.concatenate([np.stack(numbers(line), axis=1) for line in solid])
    true = scene.seen(planned.trajectory.at(scene.times))[: len(moved), :2]
    feet = scene.feet[: len(moved)]
    away = np.linalg.norm(moved - feet, axis=1)
    assert_allclose(away, factor * np.linalg.norm(true - feet, axis=1), atol=1e-6)
    assert 0.5 * factor * 5.0 < away.max() <= factor * 5.0 * (1 + 1e-6)


def test_names_are_shown_as_they_are_written(tmp_path: Path) -> None:
    """A name may hold signs that mean something to XML or to a typesetter."""
    write_picture(small("one axis"), tmp_path / "picture.svg")
    words = [
        text.text
        for text in ET.parse(tmp_path / "picture.svg").iter(f"{SVG}text")  # noqa: S314
    ]
    assert "feeder $x$ <b>" in words


def test_a_notebook_shows_the_figure() -> None:
    """Without pyplot a notebook asks the figure itself for its picture."""
    figure = sample("tile-turner/cycle.toml").plot()
    show = getattr(figure, "_repr_png_")  # noqa: B009 - a notebook asks in this way
    assert imread(io.BytesIO(show())).shape[2] == 4


def test_a_missing_library_is_named_with_its_remedy(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """Who has not installed the extra is told how, before the planning begins."""
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    result = run(str(SAMPLE_JOBS / "kiln-loader" / "pallet.toml"), "-o", str(tmp_path / "p.png"))
    assert result.exit_code == 2
    assert result.stderr.count("\n") == 1
    assert "pip install 'profileplan[report]'" in result.stderr
    with pytest.raises(InputError, match="profileplan\\[report\\]"):
        small("rotary").plot()


@pytest.mark.parametrize("name", ["picture.jpg", "picture", "picture.PNG.zip"])
def test_an_unknown_ending_is_refused_with_those_allowed(name: str, tmp_path: Path) -> None:
    """The wrong ending is told before the planning begins, and nothing is written."""
    result = run(str(SAMPLE_JOBS / "kiln-loader" / "pallet.toml"), "-o", str(tmp_path / name))
    assert result.exit_code == 2
    for allowed in (".png", ".svg", ".pdf"):
        assert allowed in result.stderr
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("name", "status", "words"),
    [("tile-turner/cycle.toml", 1, ()), ("kiln-loader/cycle.toml", 0, ("-q",))],
)
def test_the_command_tells_the_verdict_and_draws_it(
    name: str, status: int, words: tuple[str, ...], tmp_path: Path
) -> None:
    """A missed target ends with 1, and the picture is there to show why."""
    file = tmp_path / "picture.svg"
    result = run(str(SAMPLE_JOBS / name), "-o", str(file), *words)
    assert result.exit_code == status
    assert f"cycle time {sample(name).duration:.3f} s" in result.stdout
    assert ("MISSED" in result.stdout) == bool(status)
    assert (f"wrote {file}" in result.stderr) == (not words)
    assert result.stdout.count("\n") == (1 if words else 2)
    assert file.read_bytes().startswith(b"<?xml")


def test_what_is_read_is_not_written_over(tmp_path: Path) -> None:
    """A link that leads to the job must not turn it into a picture."""
    job = tmp_path / "cycle.toml"
    text = (SAMPLE_JOBS / "tile-turner" / "cycle.toml").read_text(encoding="utf-8")
    machine = SAMPLE_JOBS / "tile-turner" / "machine.toml"
    job.write_text(text.replace('"machine.toml"', f"'{machine}'"), encoding="utf-8")
    (tmp_path / "picture.png").symlink_to(job)
    before = job.read_bytes()
    result = run(str(job), "-o", str(tmp_path / "picture.png"))
    assert result.exit_code == 2
    assert job.read_bytes() == before


def test_a_folder_that_is_not_there_is_told(tmp_path: Path) -> None:
    """A picture that cannot be written ends in one message."""
    result = run(
        str(SAMPLE_JOBS / "tile-turner" / "cycle.toml"), "-o", str(tmp_path / "no" / "p.svg")
    )
    assert result.exit_code == 2
    assert "cannot be written" in result.stderr
