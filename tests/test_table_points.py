"""Tables of few points: what a drive does that follows cubics from one to the next."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.interpolate import CubicHermiteSpline

import profileplan as pp
from profileplan.checks import Manner, Row, judge_file
from profileplan.inputs import Dialect
from profileplan.setpoints import Content, pvt, write_pvt, write_table

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from profileplan.checks import Finding, TableJudgement

MACHINE = pp.Machine(
    name="portal",
    axes=(
        pp.Axis(
            "x",
            travel=(-1000.0, 1000.0),
            velocity=500.0,
            acceleration=3000.0,
            deceleration=2000.0,
            jerk=60000.0,
        ),
    ),
)

FREE = replace(
    MACHINE,
    axes=(pp.Axis("x", travel=(-1e6, 1e6), velocity=1e6, acceleration=1e9, jerk=1e12),),
)

Point = tuple[float, float, float]


def written(folder: Path, points: Sequence[Point], decimals: int = 6) -> Path:
    """Write times, positions and velocities as a table."""
    file = folder / "points.csv"
    rows = [f"{t:.4f},{x:.{decimals}f},{v:.{decimals}f}\n" for t, x, v in points]
    file.write_text("t_s,x_pos_mm,x_vel_mm_s\n" + "".join(rows), "utf-8")
    return file


def found(judged: TableJudgement, check: str) -> Finding:
    """Return a finding."""
    return next(f for f in judged.findings if f.check == check)


def over(judged: TableJudgement) -> set[str]:
    """Return what is not met between points."""
    return {f.check for f in judged.findings if not f.ok and "between" in f.check}


@settings(max_examples=60, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    points=st.lists(
        st.tuples(st.integers(1, 4000), st.floats(-500, 500), st.floats(-400, 400) | st.just(0.0)),
        min_size=3,
        max_size=12,
    ),
    block=st.sampled_from([40, 1 << 20]),
)
def test_extremes_of_cubics_are_those_of_another_library(
    tmp_path: Path, points: list[tuple[int, float, float]], block: int
) -> None:
    """Dense samples of scipy's CubicHermiteSpline come near to every extreme and never pass it."""
    ticks = np.cumsum([tick for tick, _, _ in points]) / 1000
    rows = [
        (float(t), round(x, 6), round(v, 6)) for t, (_, x, v) in zip(ticks, points, strict=True)
    ]
    file = written(tmp_path, rows)
    judged = judge_file(file, FREE, manner=Manner(points=True), block=block)
    time, position, velocity = np.array(rows).T
    spline = CubicHermiteSpline(time, position, velocity)
    dense = (time[:-1, np.newaxis] + np.diff(time)[:, np.newaxis] * np.linspace(0, 1, 4001)).T
    # An end of a piece belongs to it alone: accelerations leap there.
    inside = np.clip(dense, time[:-1] + 1e-12, time[1:] - 1e-12)
    speed, push = spline(inside, 1), spline(inside, 2)
    runs = speed * push
    samples = {
        "travel, low end": (spline(dense).min(), -1),
        "travel, high end": (spline(dense).max(), 1),
        "velocity between points": (np.abs(speed).max(), 1),
        "acceleration between points": (np.abs(push[runs > 0]).max(initial=0.0), 1),
        "deceleration between points": (np.abs(push[runs < 0]).max(initial=0.0), 1),
        "jerk between points": (np.abs(spline(inside, 3)).max(), 1),
    }
    scale = max(1.0, np.abs(push).max())
    for check, (sample, sign) in samples.items():
        value = found(judged, check).value
        if check == "deceleration between points":
            # At rest, within a millionth of the velocity limit, neither side counts.
            assert value <= np.abs(push).max() * (1 + 1e-6)
            continue
        assert sign * (value - sample) >= -1e-6 * scale
        if "acceleration" not in check:
            assert abs(value - sample) <= 1e-3 * scale


def test_slowing_down_has_its_own_limit(tmp_path: Path) -> None:
    """From 0 to 100 mm in 0.5 s: 2400 mm/s² at either end, where 2000 are allowed in slowing."""
    points: list[Point] = [(0, 0, 0), (0.5, 100, 0), (0.7, 100, 0), (0.8, 100, 0), (1.5, 0, 0)]
    judged = judge_file(written(tmp_path, points), MACHINE)
    assert over(judged) == {"deceleration between points"}
    slowing = found(judged, "deceleration between points")
    # At less than a millionth of the velocity limit an axis stands.
    assert_allclose(slowing.value, 2400, rtol=1e-6)
    assert slowing.first == Row(3, 0.5)
    assert_allclose(found(judged, "acceleration between points").value, 2400, rtol=1e-9)
    assert_allclose(found(judged, "velocity between points").value, 300, rtol=1e-9)
    assert_allclose(found(judged, "jerk between points").value, 9600, rtol=1e-9)


def test_a_reversal_slows_down_and_speeds_up(tmp_path: Path) -> None:
    """A parabola back to its begin: 2500 mm/s² before and after the turn."""
    points: list[Point] = [(0, 0, 250), (0.2, 0, -250), (0.3, -20, -150), (0.6, -40, 0)]
    judged = judge_file(written(tmp_path, points), MACHINE)
    assert_allclose(found(judged, "deceleration between points").value, 2500, rtol=1e-9)
    assert_allclose(found(judged, "acceleration between points").value, 2500, rtol=1e-9)
    assert_allclose(found(judged, "travel, high end").value, 12.5, rtol=1e-9)


def test_a_cubic_that_leaves_the_travel_is_found(tmp_path: Path) -> None:
    """Both of its ends are inside: 995 mm, and 20 mm/s outward, then inward."""
    points: list[Point] = [(0, 995, 0), (0.5, 995, 20), (3, 995, -20), (3.4, 995, 0)]
    judged = judge_file(written(tmp_path, points), MACHINE)
    high = found(judged, "travel, high end")
    assert_allclose(high.value, 995 + 2.5 * 20 / 4, rtol=1e-12)
    assert high.first == Row(4, 3.0)


def test_leaps_of_acceleration_are_told_and_not_judged(tmp_path: Path) -> None:
    """No limit of jerk allows them: the note says how large they are, and where."""
    points: list[Point] = [(0, 0, 0), (0.5, 50, 0), (0.7, 50, 0), (1.5, 0, 0)]
    judged = judge_file(written(tmp_path, points), MACHINE)
    assert over(judged) == set()
    told = next(note for note in judged.notes if "leaps" in note)
    assert "by 1200 mm/s² at most, in line 2, at 0 s" in told
    assert judge_file(written(tmp_path, points), FREE).notes[1:] != ()
    loose = replace(MACHINE, axes=(replace(MACHINE.axes[0], jerk=None),))
    judged = judge_file(written(tmp_path, points), loose)
    assert "jerk between points" not in {f.check for f in judged.findings}
    assert not any("leaps" in note for note in judged.notes)


@pytest.mark.parametrize("decimals", [2, 4])
def test_rounding_of_points_is_allowed_for(tmp_path: Path, decimals: int) -> None:
    """A cubic at its limits, whose points are rounded: 12 p / h² + 6 v / h."""
    # 1500 mm/s² at both ends of each cubic; slowing and speeding limits are just that.
    axis = replace(MACHINE.axes[0], acceleration=1500.0, deceleration=1500.0, jerk=None)
    machine = replace(MACHINE, axes=(axis,))
    random = np.random.default_rng(1)
    points: list[Point] = [(0.0, 0.0, 0.0)]
    for span in random.choice([0.02, 0.05, 0.0741], 60):
        time, place, _ = points[-1]
        points.append((time + span, place + 250 * span**2, 0.0))
    judged = judge_file(written(tmp_path, points, decimals), machine)
    assert over(judged) == set()
    spoiled = [
        *points[:30],
        (points[30][0], points[30][1] + 10.0**-decimals * 5, 0.0),
        *points[31:],
    ]
    judged = judge_file(written(tmp_path, spoiled, decimals), machine)
    assert over(judged) & {"acceleration between points", "deceleration between points"}


def test_points_of_a_plan_inside_its_limits_are_good(tmp_path: Path) -> None:
    """Made of a plan below the limits of the machine; at them, cubics pass the plan's own."""
    slow = replace(
        MACHINE, axes=(pp.Axis("x", travel=(0, 900), velocity=400, acceleration=1500, jerk=30000),)
    )
    moves = (pp.Move({"x": 700.0}), pp.Wait(2.5), pp.Move({"x": 100.0}))
    plan = pp.plan(slow, pp.Cycle(steps=moves, start={"x": 0.0}))
    for dialect in (Dialect(), Dialect(time="ms"), Dialect(time="tick")):
        file = tmp_path / "points.csv"
        write_pvt(plan, pvt(plan, error=0.001, dialect=dialect), file)
        judged = judge_file(file, MACHINE)
        assert [f for f in judged.findings if not f.ok] == []
        assert found(judged, "velocity between points").value > 399.9
        assert any("follows cubics" in note for note in judged.notes)


def test_rows_at_every_tick_are_no_points_unless_that_is_said(tmp_path: Path) -> None:
    """What a drive does between ticks is its own affair."""
    plan = pp.plan(MACHINE, pp.Cycle(steps=(pp.Move({"x": 300.0}),), start={"x": 0.0}))
    file = tmp_path / "table.csv"
    write_table(plan, file, content=Content(("pos", "vel")))
    assert not any("between" in f.check for f in judge_file(file, MACHINE).findings)
    judged = judge_file(file, MACHINE, manner=Manner(points=True))
    assert any("between" in f.check for f in judged.findings)
    lines = file.read_text("utf-8").splitlines()
    del lines[100]
    file.write_text("\n".join(lines), "utf-8")
    assert not found(judge_file(file, MACHINE), "even period").ok
    points = [(0.01 * n**2, 0.0, 0.0) for n in range(9)]
    judged = judge_file(written(tmp_path, points), MACHINE, manner=Manner(points=False))
    assert not found(judged, "even period").ok
    write_table(plan, file, content=Content(("pos",)))
    with pytest.raises(pp.InputError, match="columns of velocity: needed"):
        judge_file(file, MACHINE, manner=Manner(points=True))


def test_points_that_do_not_follow_each_other_are_found_alone(tmp_path: Path) -> None:
    """Nothing can be told of what happens in no time."""
    points: list[Point] = [(0, 0, 0), (0.5, 50, 0), (0.5, 60, 0), (1.5, 60, 0), (1.9, 60, 0)]
    judged = judge_file(written(tmp_path, points), MACHINE)
    assert found(judged, "rising time").first == Row(4, 0.5)
    assert over(judged) == set()


def test_blocks_judge_points_alike(tmp_path: Path) -> None:
    """The cubic between the last point of a block and the first of the next counts."""
    random = np.random.default_rng(7)
    time = np.cumsum(random.choice([0.01, 0.013, 0.04], 5000))
    rows = [
        (float(t), float(400 * np.sin(t)), float(400 * np.cos(t) + (n % 700 == 699)))
        for n, t in enumerate(time)
    ]
    file = written(tmp_path, rows)
    whole = judge_file(file, MACHINE)
    assert any("between" in f.check and not f.ok for f in whole.findings)
    for block in (3000, 40_001):
        assert judge_file(file, MACHINE, block=block) == whole


def test_clearance_is_judged_along_cubics(tmp_path: Path) -> None:
    """Points round a post: the lines between them would hit it, the cubics do not."""
    axes = tuple(replace(MACHINE.axes[0], name=name) for name in "xy")
    post = pp.Keepout("post", circle=pp.Circle(0.0, 0.0, 90.0))
    cell = replace(MACHINE, axes=axes, tool=pp.Tool(radius=5.0, margin=1.0), keepouts=(post,))
    # Eighths of a circle of 100 mm, 0.5 and 0.6 s apart in turn: of their chords the middles are at
    # 92.4 mm, of cubics at 99.9 mm or more where the rates fit.
    angle = np.concatenate([[0.0], np.cumsum(np.tile([np.pi / 4, np.pi / 4 * 1.2], 3))])
    time = angle / (np.pi / 2)
    speed = np.pi / 2 * 100
    rows = [
        f"{t:.4f},{100 * np.cos(a):.6f},{-speed * np.sin(a):.6f},{100 * np.sin(a):.6f},"
        f"{speed * np.cos(a):.6f}\n"
        for t, a in zip(time, angle, strict=True)
    ]
    file = tmp_path / "points.csv"
    head = "t_s,x_pos_mm,x_vel_mm_s,y_pos_mm,y_vel_mm_s\n"
    file.write_text(head + "".join(rows), "utf-8")
    near = found(judge_file(file, cell), "clearance")
    assert near.ok
    # What the lines may be off by is allowed for: the bends of 16 pieces.
    assert 4 < near.value < 5.01
    bigger = replace(post, circle=pp.Circle(0.0, 0.0, 95.0))
    near = found(judge_file(file, replace(cell, keepouts=(bigger,))), "clearance")
    assert not near.ok
    assert near.line is not None
