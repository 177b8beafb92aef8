"""Points between which a drive follows cubics: few, near the plan, and inside the limits."""

from __future__ import annotations

import json
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING

import hypothesis.strategies as st
import numpy as np
import pytest
from click.testing import CliRunner, Result
from hypothesis import given, settings
from scipy.interpolate import CubicHermiteSpline

import profileplan as pp
from profileplan import setpoints
from profileplan.cli import cli
from profileplan.inputs import Drive, load_job
from profileplan.setpoints import Content, Dialect, PvtTable

if TYPE_CHECKING:
    import numpy.typing as npt

    Array = npt.NDArray[np.float64]

SAMPLES = Path(__file__).parents[1] / "samples"

JOBS = {
    "kiln-loader/cycle.toml": "kiln-loader/machine.toml",
    "tile-turner/cycle.toml": "tile-turner/machine.toml",
    "sealant-portal/bead.csv": "sealant-portal/machine.toml",
}
"""Samples that are planned fast, and their machines."""

MOST_POINTS = {
    ("kiln-loader/cycle.toml", 0.001): 137,
    ("tile-turner/cycle.toml", 0.001): 60,
    ("sealant-portal/bead.csv", 0.001): 67,
}
"""Little more than what was needed for the error alone, on ticks: 137, 57 and 67."""

ROUNDING = 1e-3
"""Share of a limit that rounding to the usual decimals may explain here, where points are near."""

JOB = 'machine = "machine.toml"\n[start]\nx = 0\n[[steps]]\nmove = {{ x = 300 }}{more}\n'

MACHINE = """
[axes.x]
travel = [0, 300]
velocity = 500
acceleration = 3000
deceleration = 2000
jerk = 60000
[axes.x.drive]
increments = {increments}
lead = 20
"""


@cache
def planned(name: str) -> pp.Plan:
    """Return the plan of a sample."""
    return pp.plan(load_job(SAMPLES / name, machine=SAMPLES / JOBS[name]))


def run(*words: str | Path) -> Result:
    """Run the command line in this process."""
    return CliRunner(env={"COLUMNS": "100"}).invoke(cli, [str(word) for word in words])


def job(folder: Path, *, increments: int = 20_000, more: str = "") -> Path:
    """Write a job of one axis that stops at the end of its travel."""
    (folder / "machine.toml").write_text(MACHINE.format(increments=increments), encoding="utf-8")
    (folder / "cycle.toml").write_text(JOB.format(more=more), encoding="utf-8")
    return folder / "cycle.toml"


def splines(points: PvtTable, decimals: tuple[int, int] = (9, 6)) -> CubicHermiteSpline:
    """Return scipy's cubics between the points as they are written."""
    position = points.position.round(decimals[0])
    return CubicHermiteSpline(points.time, position, points.velocity.round(decimals[1]))


def instants(points: PvtTable, count: int = 101) -> Array:
    """Return many instants of every span, its ends among them: (n - 1, count)."""
    shares = np.linspace(0.0, 1.0, count) * (1 - 1e-12)
    spans: Array = points.time[:-1, np.newaxis] + shares * np.diff(points.time)[:, np.newaxis]
    return spans


@pytest.mark.parametrize("error", [0.02, 0.001, 2e-6])
@pytest.mark.parametrize("name", JOBS)
def test_exported_points_of_every_fast_sample_pass_the_check(
    name: str, error: float, tmp_path: Path
) -> None:
    """What reaches the drive keeps the limits, by the second opinion on the file itself."""
    plan, file = planned(name), tmp_path / "points.csv"
    points = setpoints.pvt(plan, error=error)
    setpoints.write_pvt(plan, points, file)
    result = run("check", file, "-m", SAMPLES / JOBS[name])
    assert result.exit_code == 0, result.output
    assert "acceleration between" in result.output
    assert points.kept
    assert max(axes.max() for axes in points.excess.values()) < ROUNDING
    assert points.ticks.size <= MOST_POINTS.get((name, error), 400)


def test_the_command_writes_points_that_its_check_accepts(tmp_path: Path) -> None:
    """From end to end, with the status that scripts go by."""
    file = tmp_path / "points.csv"
    name = "kiln-loader/cycle.toml"
    result = run("export", SAMPLES / name, "-o", file, "--points", "pvt", "--json")
    assert result.exit_code == 0, result.output
    assert json.loads(result.stdout)["limits_kept"] is True
    assert "over" not in result.stderr
    assert "where cubics meet the acceleration leaps" in result.stderr
    assert run("check", file, "-m", SAMPLES / JOBS[name]).exit_code == 0


def test_a_spoiled_table_fails(tmp_path: Path) -> None:
    """A point moved by a hundredth of a millimetre, in a file that passed."""
    cycle = job(tmp_path)
    file = tmp_path / "points.csv"
    assert run("export", cycle, "-o", file, "--points", "pvt").exit_code == 0
    assert run("check", file, "-m", tmp_path / "machine.toml").exit_code == 0
    header, *rows = file.read_text("utf-8").splitlines()
    cells = rows[len(rows) // 3].split(",")
    cells[1] = f"{float(cells[1]) + 0.01:.9f}"
    rows[len(rows) // 3] = ",".join(cells)
    file.write_text("\n".join([header, *rows]), "utf-8")
    result = run("check", file, "-m", tmp_path / "machine.toml")
    assert result.exit_code == 1
    assert "acceleration between" in result.output


limits = st.floats(0.05, 1.0)
places = st.integers(-400, 400)


@st.composite
def plans(draw: st.DrawFn) -> pp.Plan:
    """Return plans of random moves and lines on two axes by either law."""
    axes = tuple(
        pp.Axis(
            name,
            travel=(-400.0, 400.0),
            velocity=round(1500 * draw(limits), 3),
            acceleration=round(8000 * draw(limits), 2),
            deceleration=round(8000 * draw(limits), 2),
            jerk=round(150_000 * draw(limits), 1),
        )
        for name in ("x", "y")
    )
    steps: list[pp.Move | pp.Line] = [pp.Move({"x": float(draw(st.integers(1, 400)))})]
    for _ in range(draw(st.integers(0, 2))):
        kind = draw(st.sampled_from([pp.Move, pp.Line]))
        to = {"x": float(draw(places)), "y": float(draw(places))}
        steps.append(kind(to, law=draw(st.sampled_from(["trapezoidal", "quintic"]))))
    machine = pp.Machine(name="portal", axes=axes)
    return pp.plan(machine, pp.Cycle(steps=tuple(steps), start={"x": 0.0, "y": 0.0}))


@settings(max_examples=25)
@given(plan=plans(), error=st.sampled_from([0.5, 0.02, 0.001, 2e-5]))
def test_cubics_keep_the_error_and_the_limits_at_every_instant(plan: pp.Plan, error: float) -> None:
    """Against scipy's cubics: by no more than positions and velocities as they are rounded."""
    points = setpoints.pvt(plan, error=error)
    assert points.kept
    cubic, times = splines(points), instants(points)
    length = np.diff(points.time)[:, np.newaxis, np.newaxis]
    assert np.abs(
        cubic(times) - plan.trajectory.at(times.ravel()).reshape(*times.shape, 2)
    ).max() <= (error + 1e-9)
    place, speed, rate = cubic(times), cubic(times, 1), cubic(times, 2)
    for column, axis in enumerate(plan.job.machine.axes):
        own = axis.limits
        assert np.abs(place[..., column]).max() <= 400 + 2e-9
        run, push = speed[..., column], rate[..., column]
        # A change of acceleration may be missed by half a nanosecond.
        rounded = 5e-7 + 1e-9 * max(own.deceleration, own.acceleration)
        share = 1.5e-9 / length[..., 0] + rounded
        assert (np.abs(run) <= own.velocity * (1 + 1e-8) + share).all()
        share = 6e-9 / length[..., 0] ** 2 + 6 * rounded / length[..., 0]
        # Slower than rounding tells it is not known which way the axis goes.
        still = np.abs(run) <= 2e-6 * own.velocity + 3e-9 / length[..., 0] + 1e-6
        most = np.where(run * push < 0, own.deceleration, own.acceleration)
        most = np.where(still, max(own.deceleration, own.acceleration), most)
        assert (np.abs(push) <= most * (1 + 1e-8) + share).all()


def test_a_peak_of_the_acceleration_is_passed_in_the_middle_of_a_span() -> None:
    """There a cubic stays below it, so a quintic needs no reserve; its points are few."""
    axis = pp.Axis("x", travel=(0.0, 500.0), velocity=900, acceleration=4000, jerk=200_000)
    cycle = pp.Cycle(steps=(pp.Move({"x": 300.0}, law="quintic"),), start={"x": 0.0})
    plan = pp.plan(pp.Machine(name="portal", axes=(axis,)), cycle)
    points = setpoints.pvt(plan, error=0.001)
    most = np.abs(splines(points)(instants(points), 2)).max()
    assert plan.trajectory.peaks.acceleration.value[0] == pytest.approx(4000, rel=1e-9)
    assert 3900 < most <= 4000 * (1 + 1e-5)
    assert points.ticks.size <= 32


def test_breaks_of_a_plan_are_hit() -> None:
    """A motion of seven phases of constant jerk is eight points, whatever the error."""
    axis = pp.Axis("x", travel=(0.0, 900.0), velocity=500, acceleration=3000, jerk=60_000)
    cycle = pp.Cycle(steps=(pp.Move({"x": 800.0}),), start={"x": 0.0})
    plan = pp.plan(pp.Machine(name="portal", axes=(axis,)), cycle)
    points = setpoints.pvt(plan, error=1e-7)
    assert points.ticks.size == 8
    assert np.abs(points.time - plan.trajectory.breaks).max() <= 1e-9


def test_on_ticks_a_limit_that_is_passed_ends_with_1(tmp_path: Path) -> None:
    """Breaks between ticks cannot be hit: the status, a note and the JSON say so."""
    cycle, file = job(tmp_path), tmp_path / "points.csv"
    words: list[str | Path] = ["export", cycle, "-o", file, "--points", "pvt"]
    words += ["--period", "0.004", "--json"]
    result = run(*words, "--error", "0.01")
    assert result.exit_code == 1, result.output
    told = json.loads(result.stdout)
    assert told["limits_kept"] is told["cubics"]["x"]["kept"] is False
    assert "the limit is not kept" in result.stderr
    assert "Points off ticks keep it: leave out --period" in result.stderr
    assert run("check", file, "-m", tmp_path / "machine.toml").exit_code == 1
    assert run(*words[:-3], "--error", "0.01").exit_code == 0


def test_on_ticks_points_are_multiples_of_the_period() -> None:
    """As drives with a clock want them; times that are told in ticks mean the machine's own."""
    plan = planned("tile-turner/cycle.toml")
    on_ticks = setpoints.pvt(plan, error=0.02, content=Content(period=0.001))
    assert on_ticks.tick == pytest.approx(0.001, rel=1e-15)
    assert np.abs(np.rint(on_ticks.time * 1e3) - on_ticks.time * 1e3).max() < 1e-9
    own = setpoints.pvt(plan, error=0.02, dialect=Dialect(time="tick"))
    assert own.tick == pytest.approx(plan.job.machine.setpoints.period, rel=1e-15)


def test_coarse_increments_are_told_with_their_share(tmp_path: Path) -> None:
    """The axis, its increment and by how much; and the drive's numbers are what is judged."""
    cycle, file = job(tmp_path, increments=200), tmp_path / "points.csv"
    words: list[str | Path] = ["export", cycle, "-o", file, "--points", "pvt"]
    words += ["--units", "increments"]
    result = run(*words, "--error", "0.06", "--json")
    told = json.loads(result.stdout)["cubics"]["x"]
    numbers = np.genfromtxt(file, delimiter=",", skip_header=1)
    cubic = CubicHermiteSpline(numbers[:, 0], numbers[:, 1] / 10, numbers[:, 2] / 10)
    times = numbers[:-1, 0] + np.linspace(0, 1 - 1e-12, 501)[:, np.newaxis] * np.diff(numbers[:, 0])
    most = np.abs(cubic(times, 1)).max()
    assert told["velocity"] == pytest.approx(most, rel=1e-6)
    worst = max(told["over_limit"], key=lambda name: told["over_limit"][name])
    assert told["over_limit"][worst] > 1e-4
    assert f"note: x {worst}: between points" in result.stderr
    assert "rounding, of positions to increments of 0.1 mm, explains" in result.stderr
    assert result.exit_code == (0 if told["kept"] else 1)
    assert told["kept"] is (told["over_limit"][worst] <= 0.01)
    fine = run("export", job(tmp_path), *words[2:], "--error", "0.06", "--json")
    assert fine.exit_code == 0
    assert (
        json.loads(fine.stdout)["cubics"]["x"]["over_limit"][worst]
        < 0.1 * told["over_limit"][worst]
    )


def test_leaps_are_those_where_scipys_cubics_meet(tmp_path: Path) -> None:
    """A leap of acceleration is no jerk of a cubic, so it is told beside."""
    plan = planned("tile-turner/cycle.toml")
    points = setpoints.pvt(plan, error=0.02)
    cubic = splines(points)
    before, after = cubic(points.time[1:-1] - 1e-12, 2), cubic(points.time[1:-1], 2)
    # scipy divides by each span once more than needed: rounding of the velocities counts.
    assert points.leaps == pytest.approx(np.abs(after - before).max(axis=0), rel=1e-3)
    file = tmp_path / "points.csv"
    setpoints.write_pvt(plan, points, file)
    assert (points.leaps > 0).all()


def test_limits_that_are_far_cost_no_points() -> None:
    """Points are more only where a limit would be passed."""
    plan = planned("tile-turner/cycle.toml")
    machine = plan.job.machine
    axes = tuple(
        replace(
            axis,
            velocity=2 * axis.limits.velocity,
            acceleration=2 * axis.limits.acceleration,
            deceleration=2 * axis.limits.deceleration,
        )
        for axis in machine.axes
    )
    far = replace(plan, job=replace(plan.job, machine=replace(machine, axes=axes)))
    counts = [setpoints.pvt(own, error=0.02).ticks.size for own in (far, plan)]
    assert counts[0] <= counts[1] <= 1.3 * counts[0]


def test_second_drives_keep_the_limits_too() -> None:
    """Counts of a twin with its own offset are rounded otherwise, and judged like the first's."""
    axis = pp.Axis("x", travel=(-800, 800), velocity=500, acceleration=3000, jerk=60_000)
    cycle = pp.Cycle(steps=(pp.Move({"x": 311.7}),), start={"x": 0.0})
    plan = pp.plan(pp.Machine(name="portal", axes=(axis,)), cycle)
    drive = Drive(100_000, lead=20.0)
    points = setpoints.pvt(plan, error=0.001, content=Content(drives={"x": drive}))
    assert points.kept
    assert points.excess["acceleration"][0] <= points.explained["acceleration"][0]
