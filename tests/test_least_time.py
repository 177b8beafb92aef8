"""Paths with a tolerance: how soon, inside what, and what holds them back.

Two plans of the same problem, seen from another side, differ by the search's own gap: ``GAP``.
"""

from __future__ import annotations

import json
from dataclasses import replace
from functools import cache
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
import pytest
import shapely
from numpy.testing import assert_allclose, assert_array_equal, assert_array_less

import profileplan as pp
from profileplan.geometry.corridor import tubes
from profileplan.motion.least_time import lower_bound
from profileplan.motion.rounds import Bounds

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.motion.polynomials import Array

    Points: TypeAlias = Sequence[tuple[float, ...]]

GAP = 5e-3
"""Share of a duration by which two searches for the same least time may differ."""

SLACK = 1e-6
"""Distance [mm or deg] by which a tolerance may be passed."""

SAMPLES = 4001

NAMES = "xyzc"

BEST_FOUND = 1.005
"""Greatest duration over the best found by an earlier search on a finer grid: the project's aim."""


def machine(
    velocity: Sequence[float],
    acceleration: Sequence[float],
    jerk: Sequence[float | None] | None,
    *,
    slowing: float | None = None,
    rotary: str = "",
) -> pp.Machine:
    """Return a machine with much room; ``slowing`` is deceleration over acceleration."""
    axes = [
        pp.Axis(
            name,
            kind="rotary" if name in rotary else "linear",
            travel=(-1e5, 1e5),
            velocity=own_velocity,
            acceleration=own_acceleration,
            deceleration=None if slowing is None else slowing * own_acceleration,
            jerk=own_jerk,
        )
        for name, own_velocity, own_acceleration, own_jerk in zip(
            NAMES, velocity, acceleration, jerk or [None] * len(velocity), strict=False
        )
    ]
    return pp.Machine(name="portal", axes=tuple(axes))


PORTAL = machine([2000, 1500], [12000, 9000], [200000, 150000])
STEPPED: Points = ((0, 0), (100, 0), (100, 100), (300, 50))


def job(points: Points, step: pp.PathStep) -> pp.Cycle:
    """Return a cycle of one path, with its first point as the start."""
    return pp.Cycle(steps=(step,), start=dict(zip(NAMES, map(float, points[0]), strict=False)))


def through(points: Points) -> tuple[pp.Waypoint, ...]:
    """Return the points of a path, without the first."""
    return tuple(
        pp.Waypoint(dict(zip(NAMES, map(float, point), strict=False))) for point in points[1:]
    )


@cache
def planned(
    points: Points = STEPPED,
    tolerance: float = 2.0,
    of: pp.Machine = PORTAL,
    speed: float | None = None,
    time: float | None = None,
) -> pp.Plan:
    """Return the plan of a path; many tests ask for the same."""
    step = pp.PathStep(through(points), tolerance=tolerance, speed=speed, time=time)
    return pp.plan(of, job(points, step))


def failures(schedule: pp.Plan) -> list[str]:
    """Return the findings that are not met, as text."""
    return [
        f"{f.check} of {f.axis}: {f.value!r} of {f.limit!r} {f.unit}"
        for f in pp.check(schedule)
        if not f.ok
    ]


def spoilt(plan: pp.Plan, trajectory: pp.Trajectory) -> list[str]:
    """Return what is found when another motion is played than the one planned."""
    step = replace(plan.steps[0], trajectory=trajectory)
    return failures(pp.Plan(plan.job, (step,), ()))


def to_segments(positions: Array, points: Array) -> Array:
    """Return the distances from positions to every segment: (n, m)."""
    found = []
    for one, other in pairwise(points):
        way = other - one
        square = float(way @ way)
        share = np.clip((positions - one) @ way / square, 0, 1) if square else 0 * positions[:, 0]
        found.append(np.linalg.norm(positions - one - share[:, np.newaxis] * way, axis=1))
    return np.stack(found, axis=1)


def assert_within(plan: pp.Plan, points: Points, tolerance: float) -> None:
    """Compare motion and path both ways, on dense samples; in the plane by shapely.

    Between two samples the motion leaves its chord by at most a dt² / 8, which is allowed for at
    the corners; the motion's own distance needs no allowance, for samples lie on it.
    """
    drawn = np.array(points, dtype=np.float64)
    times = np.linspace(0, plan.duration, SAMPLES)
    sampled = plan.trajectory.at(times)[:, : drawn.shape[1]]
    if drawn.shape[1] == 2:
        line = shapely.LineString(drawn)
        away = shapely.distance(line, shapely.points(sampled))
        missed = shapely.distance(shapely.LineString(sampled), shapely.points(drawn))
    else:
        away = to_segments(sampled, drawn).min(axis=1)
        missed = to_segments(drawn, sampled).min(axis=1)
    assert away.max() <= tolerance + SLACK, f"motion {away.max()} mm from the path"
    peaks = plan.trajectory.peaks
    most = np.maximum(peaks.acceleration.value, peaks.deceleration.value)
    chord = float(np.linalg.norm(most)) * times[1] ** 2 / 8
    assert missed.max() <= tolerance + SLACK + chord, f"corner {missed.max()} mm from the motion"


# Closed forms


@pytest.mark.parametrize("jerk", [(200000, 150000), (None, None), (200000, None)])
@pytest.mark.parametrize("slowing", [0.3, 1.0, 3.0])
def test_a_single_segment_takes_exactly_the_closed_form(
    jerk: tuple[float | None, ...], slowing: float
) -> None:
    """A straight line through a tube has no corner to gain anything from."""
    of = machine([2000, 1500], [12000, 9000], jerk, slowing=slowing)
    points = ((0.0, 0.0), (300.0, 120.0))
    line = pp.Cycle(steps=(pp.Line({"x": 300.0, "y": 120.0}),), start={"x": 0.0, "y": 0.0})
    assert planned(points, 2.0, of).duration == pp.plan(of, line).duration
    assert failures(planned(points, 2.0, of)) == []


def test_without_tolerance_the_time_is_the_sum_of_closed_forms() -> None:
    """Exact stops at every point."""
    lines = tuple(pp.Line(dict(zip("xy", map(float, p), strict=True))) for p in STEPPED[1:])
    whole = pp.plan(PORTAL, pp.Cycle(steps=lines, start={"x": 0.0, "y": 0.0}))
    assert_allclose(planned(STEPPED, 0.0).duration, whole.duration, rtol=1e-13)


def test_points_on_one_line_take_the_time_of_the_line() -> None:
    """Nothing needs to slow down there: the closed form to 0.05 %."""
    whole = planned(((0.0, 0.0), (300.0, 150.0))).duration
    parts = planned(((0.0, 0.0), (100.0, 50.0), (180.0, 90.0), (300.0, 150.0)))
    # The tolerance itself allows the axes to leave the line, and to gain a little.
    assert whole * (1 - GAP) <= parts.duration <= whole * (1 + 5e-4)
    assert failures(parts) == []


def test_a_point_passed_on_one_axis_costs_nothing() -> None:
    """One axis alone cannot do better than its law."""
    of = machine([2000], [12000], [200000])
    alone = planned(((0.0,), (200.0,)), 1.0, of).duration
    with_point = planned(((0.0,), (70.0,), (200.0,)), 1.0, of).duration
    assert alone * (1 - 1e-9) <= with_point <= alone * (1 + 5e-4)


# Never slower


PROBLEMS: dict[str, tuple[Points, float, pp.Machine]] = {
    "corners": (STEPPED, 2.0, PORTAL),
    "fine": (STEPPED, 1e-3, PORTAL),
    "spike": (((0, 0), (100, 0), (0, 0)), 2.0, PORTAL),
    "hairpin": (((0, 0), (300, 0), (300, 1), (0, 1)), 5.0, PORTAL),
    "narrow hairpin": (((0, 0), (300, 0), (0, 1)), 5.0, PORTAL),
    "back on the line": (((0, 0), (100, 0), (50, 0), (80, 0)), 2.0, PORTAL),
    "back beside the line": (((0, 0), (100, 0), (50, 0.5), (80, 0)), 2.0, PORTAL),
    "to and fro": (((0, 0), (100, 0), (0, 0), (100, 0)), 2.0, PORTAL),
    "a little back": (((0, 0), (100, 0), (99, 0), (199, 0)), 5.0, PORTAL),
    "wide": (STEPPED, 60.0, PORTAL),
    "no jerk limit": (STEPPED, 2.0, machine([2000, 1500], [12000, 9000], None)),
    "one jerk limit": (STEPPED, 2.0, machine([2000, 1500], [12000, 9000], [None, 150000])),
}
for name, factor in {"slow to stop": 0.3, "quick to stop": 3.0}.items():
    own = machine([2000, 1500], [12000, 9000], [200000, 150000], slowing=factor)
    PROBLEMS[name] = (STEPPED, 2.0, own)
    own = machine([2000, 1500], [12000, 9000], None, slowing=factor)
    PROBLEMS[f"{name}, no jerk limit"] = (STEPPED, 2.0, own)


@pytest.mark.parametrize("name", PROBLEMS)
def test_a_path_is_right_and_no_slower_than_stopping(name: str) -> None:
    """Every finding is met, an independent one too, and the tolerance has gained something."""
    points, tolerance, of = PROBLEMS[name]
    plan = planned(points, tolerance, of)
    assert failures(plan) == []
    assert_within(plan, points, tolerance)
    assert plan.duration < planned(points, 0.0, of).duration
    least = plan.steps[0].least_time
    assert least is not None
    assert 0 < least <= plan.duration


def test_a_thin_tube_is_passed_by_axes_with_and_without_jerk_limit() -> None:
    """On straight parts both must move alike: the one without limit as smoothly as the other."""
    of = machine([1000, 1000], [5000, 5000], [100000, None])
    points = ((0, 0), (300, 200), (600, 0))
    plan = planned(points, 0.05, of)
    assert plan.notes == ()
    assert plan.duration < planned(points, 0.0, of).duration
    assert failures(plan) == []


def test_points_that_repeat_change_nothing() -> None:
    """A list of points often has its corners twice."""
    points = ((0, 0), (0, 0), (100, 0), (100, 0), (100, 100), (100, 100))
    plan = planned(points)
    assert failures(plan) == []
    assert_allclose(plan.duration, planned(((0, 0), (100, 0), (100, 100))).duration, rtol=1e-12)


def test_the_motion_stays_in_the_travel() -> None:
    """A path along the end of the travel: only one side of its tube can be used."""
    axes = tuple(replace(axis, travel=(0.0, 2000.0)) for axis in PORTAL.axes)
    of = replace(PORTAL, axes=axes)
    plan = planned(((0, 0), (0, 500), (500, 500)), 20.0, of)
    assert failures(plan) == []


# Never more time for more room


def raised(axis: int, quantity: str, factor: float) -> pp.Machine:
    """Return the portal with one limit of one axis raised, and all others kept."""
    axes = [replace(own, deceleration=own.acceleration) for own in PORTAL.axes]
    limits = axes[axis].limits._asdict()
    axes[axis] = replace(axes[axis], **{quantity: factor * limits[quantity]})
    return replace(PORTAL, axes=tuple(axes))


@pytest.mark.parametrize(("axis", "factor"), [(0, 1.1), (1, 3.0)])
@pytest.mark.parametrize("quantity", ["velocity", "acceleration", "deceleration", "jerk"])
def test_a_higher_limit_never_takes_longer(axis: int, quantity: str, factor: float) -> None:
    """What was possible before is possible still."""
    of = raised(axis, quantity, factor)
    assert planned(of=of).duration <= planned().duration * (1 + GAP)


def test_more_tolerance_never_takes_longer() -> None:
    """Also over five decades, from nearly exact stops to nearly free axes."""
    tolerances = [1e-3, 0.1, 1.0, 2.0, 6.0, 60.0]
    durations = [planned(STEPPED, tolerance).duration for tolerance in tolerances]
    assert (np.diff(durations) <= GAP * np.array(durations[:-1])).all(), durations


def test_a_higher_speed_never_takes_longer() -> None:
    """Down from no limit at all."""
    durations = [planned(speed=speed).duration for speed in (100.0, 400.0, 900.0, None)]
    assert (np.diff(durations) <= GAP * np.array(durations[:-1])).all(), durations


# The same problem from another side


def test_a_reversed_path_takes_as_long() -> None:
    """With limits that are the same both ways, time may run backward."""
    assert_allclose(planned(STEPPED[::-1]).duration, planned().duration, rtol=GAP)


def test_axes_in_another_order_take_as_long() -> None:
    """Columns are only names."""
    of = machine([1500, 2000], [9000, 12000], [150000, 200000])
    swapped = tuple((y, x) for x, y in STEPPED)
    assert_allclose(planned(swapped, of=of).duration, planned().duration, rtol=GAP)


@pytest.mark.parametrize("mirror", [(-1, 1), (1, -1), (-1, -1)])
def test_mirrored_axes_take_as_long(mirror: tuple[int, int]) -> None:
    """Limits know no sign."""
    points = tuple((mirror[0] * x, mirror[1] * y) for x, y in STEPPED)
    assert_allclose(planned(points).duration, planned().duration, rtol=GAP)


def test_a_shifted_path_takes_as_long() -> None:
    """Only differences of positions count."""
    points = tuple((x + 1234.5, y - 678.9) for x, y in STEPPED)
    assert_allclose(planned(points).duration, planned().duration, rtol=GAP)


@pytest.mark.parametrize("size", [1e-2, 1e2])
def test_scaled_lengths_take_as_long(size: float) -> None:
    """Inches or micrometres: all limits scaled alike."""
    of = machine(
        [2000 * size, 1500 * size], [12000 * size, 9000 * size], [2e5 * size, 1.5e5 * size]
    )
    points = tuple((x * size, y * size) for x, y in STEPPED)
    assert_allclose(planned(points, 2.0 * size, of).duration, planned().duration, rtol=GAP)


@pytest.mark.parametrize("slower", [0.1, 10.0])
def test_scaled_time_scales_the_duration(slower: float) -> None:
    """Limits divided by c, c² and c³."""
    of = machine(
        [2000 / slower, 1500 / slower],
        [12000 / slower**2, 9000 / slower**2],
        [2e5 / slower**3, 1.5e5 / slower**3],
    )
    assert_allclose(planned(of=of).duration, planned().duration * slower, rtol=GAP)


def test_a_plan_is_the_same_each_time() -> None:
    """The same bytes: a release can be compared with the last one."""
    again = pp.plan(PORTAL, job(STEPPED, pp.PathStep(through(STEPPED), tolerance=2.0)))
    assert_array_equal(again.trajectory.coefficients, planned().trajectory.coefficients)
    assert_array_equal(again.trajectory.durations, planned().trajectory.durations)


# A circle in a box of accelerations


def along_circle(turn: float, count: int = 20000) -> float:
    """Return the least time along a unit arc with |x''| <= 1 and |y''| <= 1, from the x axis.

    With b the square of the speed and a the growth of the speed x'' = -b cos - a sin and
    y'' = -b sin + a cos; along the arc b grows by 2 a. What can be reached from the start and still
    be stopped at the end is the least of a sweep forward and one backward, by the midpoint rule.

    Source: Bobrow, Dubowsky, Gibson: Time-Optimal Control of Robotic Manipulators Along Specified
    Paths (1985); from memory.
    """
    step = turn / count

    def steepest(angle: float, square: float, direction: int) -> float:
        sine, cosine = np.sin(angle), np.cos(angle)
        return min(
            (1 - direction * np.sign(by_growth) * by_square * square) / abs(by_growth)
            for by_growth, by_square in ((-sine, -cosine), (cosine, -sine))
            if abs(by_growth) > 1e-12
        )

    def sweep(start: float, direction: int) -> Array:
        squares = np.zeros(count + 1)
        for index in range(count):
            angle = start + direction * index * step
            half = squares[index] + step * steepest(angle, squares[index], direction)
            middle = angle + 0.5 * direction * step
            grown = squares[index] + 2 * step * steepest(middle, half, direction)
            end = angle + direction * step
            squares[index + 1] = min(grown, abs(np.sin(end)) + abs(np.cos(end)))
        return squares

    squares = np.minimum(sweep(0.0, 1), sweep(turn, -1)[::-1])
    speeds = np.sqrt(squares)
    return float((2 * step / (speeds[1:] + speeds[:-1])).sum())


def arc(turn: float, chords: int) -> Points:
    """Return points on a unit arc that begins on the x axis."""
    angles = np.linspace(0, turn, chords + 1)
    return tuple((float(np.cos(angle)), float(np.sin(angle))) for angle in angles)


CIRCLES = {"quarter": (np.pi / 2, 2.54929), "half": (np.pi, 4.08164)}
"""Turn, and the time that the exact arc takes, from |x''| <= 1, |y''| <= 1 [s]: derived."""


@pytest.mark.parametrize("name", CIRCLES)
def test_the_time_of_an_arc_agrees_with_its_phase_plane(name: str) -> None:
    """Two derivations of the value that the next test approaches."""
    turn, expected = CIRCLES[name]
    assert_allclose(along_circle(turn), expected, rtol=2e-5)


@pytest.mark.parametrize(("name", "chords"), [("quarter", (8, 24)), ("half", (16, 48))])
def test_an_arc_in_a_shrinking_tolerance_approaches_the_exact_one(
    name: str, chords: tuple[int, int]
) -> None:
    """From below: while its chords are in the tolerance the arc itself is a motion allowed."""
    turn, exact = CIRCLES[name]
    of = machine([1000, 1000], [1, 1], None)
    left = []
    for tolerance, count in zip((1e-2, 1e-3), chords, strict=True):
        assert 1 - np.cos(turn / count / 2) < tolerance, "the arc is inside"
        plan = planned(arc(turn, count), tolerance, of)
        assert failures(plan) == []
        left.append(1 - plan.duration / exact)
    assert min(left) > -GAP, left
    assert left[1] < left[0] / 3, left
    assert left[1] < 0.01, left


# More axes


GANTRY = machine(
    [1000, 900, 500, 180], [8000, 6000, 3000, 1200], [100000, 90000, None, 20000], rotary="c"
)
TURNED: Points = ((0, 0, 0, 0), (200, 0, 50, 90), (200, 150, 50, 90), (0, 150, 0, -45))


@pytest.mark.parametrize("angle", [0.5, 5.0])
def test_a_rotary_axis_turns_with_the_way(angle: float) -> None:
    """Some place on a segment must explain position and angle at once."""
    step = pp.PathStep(through(TURNED), tolerance=3.0, angle_tolerance=angle)
    plan = pp.plan(GANTRY, job(TURNED, step))
    assert failures(plan) == []
    assert_within(plan, tuple(point[:3] for point in TURNED), 3.0)
    sampled = plan.trajectory.at(np.linspace(0, plan.duration, 401))
    least = np.full(len(sampled), np.inf)
    for one, other in pairwise(np.array(TURNED, dtype=np.float64)):
        for share in np.linspace(0, 1, 2001):
            off = sampled - one - share * (other - one)
            near = np.linalg.norm(off[:, :3], axis=1) <= 3.0 + 0.1
            least = np.where(near, np.minimum(least, np.abs(off[:, 3])), least)
    # Shares of the way stand 0.1 mm and 0.07 deg apart.
    assert least.max() <= angle + 0.07
    stops = pp.plan(GANTRY, job(TURNED, pp.PathStep(through(TURNED))))
    assert plan.duration < stops.duration


def test_more_angle_never_takes_longer() -> None:
    """The rotary axis holds this path back."""
    durations = [
        pp.plan(
            GANTRY, job(TURNED, pp.PathStep(through(TURNED), tolerance=3.0, angle_tolerance=angle))
        ).duration
        for angle in (0.5, 5.0)
    ]
    assert (np.diff(durations) <= GAP * np.array(durations[:-1])).all(), durations


def test_a_rotary_axis_alone_turns_back_within_its_tolerance() -> None:
    """There and back by 90 degrees, less what the tolerance allows."""
    of = pp.Machine(
        name="table",
        axes=(
            pp.Axis(
                "c", kind="rotary", travel=(-200, 200), velocity=270, acceleration=1500, jerk=30000
            ),
        ),
    )
    points = (pp.Waypoint({"c": 90.0}), pp.Waypoint({"c": 0.0}))
    plan = pp.plan(of, pp.Cycle(steps=(pp.PathStep(points, tolerance=1.0),), start={"c": 0.0}))
    assert failures(plan) == []
    reached = plan.trajectory.extremes()[1].value[0]
    assert 89.5 - SLACK <= reached <= 90.5 + SLACK
    still = pp.Trajectory.rest(("c",), np.zeros(1), plan.duration)
    assert spoilt(plan, still) != [], "a table that never turns was not found"


# Speeds, waits and stops


def test_the_speed_along_the_path_is_kept() -> None:
    """Counted along the linear axes together."""
    plan = planned(speed=400.0)
    assert failures(plan) == []
    velocity = plan.trajectory.at(np.linspace(0, plan.duration, SAMPLES), 1)
    speed = np.linalg.norm(velocity, axis=1)
    assert speed.max() <= 400.0 * (1 + 1e-9)
    assert speed.max() > 399.0, "it is used"
    assert (None, "speed") in {(held.axis, held.quantity) for held in plan.steps[0].limited_by}


LEGS: Points = ((0, 0), (300, 0), (600, 100))


def with_speeds(*speeds: float) -> pp.Plan:
    """Return the plan of two legs with a speed limit each."""
    points = tuple(replace(p, speed=s) for p, s in zip(through(LEGS), speeds, strict=True))
    return pp.plan(PORTAL, job(LEGS, pp.PathStep(points, tolerance=2.0)))


@pytest.mark.parametrize("speeds", [(100.0, 500.0), (500.0, 100.0)])
def test_each_leg_keeps_its_own_speed(speeds: tuple[float, float]) -> None:
    """A slow leg before or after a fast one."""
    plan = with_speeds(*speeds)
    assert failures(plan) == []
    times = np.linspace(0, plan.duration, SAMPLES)
    speed = np.linalg.norm(plan.trajectory.at(times, 1), axis=1)
    x = plan.trajectory.at(times)[:, 0]
    for limit, leg in zip(speeds, (x < 298.0, x > 302.0), strict=True):
        assert speed[leg].max() <= limit * (1 + 1e-9)
        assert speed[leg].max() > 0.99 * limit, "it is used"


def test_too_fast_a_leg_is_found() -> None:
    """The check reads the legs' speeds by itself."""
    slow, fast = with_speeds(100.0, 500.0), with_speeds(500.0, 500.0)
    assert any("speed" in failure for failure in spoilt(slow, fast.steps[0].trajectory))


def waiting(wait: float) -> pp.Plan:
    """Return the plan of a path that waits at its second corner."""
    points = list(through(STEPPED))
    points[1] = replace(points[1], wait=wait)
    return pp.plan(PORTAL, job(STEPPED, pp.PathStep(tuple(points), tolerance=2.0)))


def test_a_wait_is_spent_at_rest_on_its_point() -> None:
    """Exactly there, and so long; the other corner is rounded."""
    plan = waiting(0.3)
    assert failures(plan) == []
    off = np.abs(plan.trajectory.at(plan.trajectory.breaks[:-1]) - [100.0, 100.0]).max(axis=1)
    piece = int(np.flatnonzero(plan.trajectory.durations >= 0.3 - 1e-12)[0])
    assert off[piece] < 1e-9
    assert_allclose(plan.trajectory.durations[piece], 0.3, rtol=1e-14)
    assert_array_equal(plan.trajectory.coefficients[piece, 1:], 0.0)
    split = planned(STEPPED[:3]).duration + planned(STEPPED[2:]).duration
    assert_allclose(plan.duration, split + 0.3, rtol=1e-9)


def test_a_wait_left_out_is_found() -> None:
    """The check reads the points' waits by itself."""
    assert spoilt(waiting(0.3), planned().steps[0].trajectory) != []


def test_a_point_of_no_tolerance_is_stopped_at() -> None:
    """The others keep theirs."""
    points = list(through(STEPPED))
    points[1] = replace(points[1], tolerance=0.0)
    plan = pp.plan(PORTAL, job(STEPPED, pp.PathStep(tuple(points), tolerance=2.0)))
    assert failures(plan) == []
    split = planned(STEPPED[:3]).duration + planned(STEPPED[2:]).duration
    assert_allclose(plan.duration, split, rtol=1e-9)
    assert spoilt(plan, planned().steps[0].trajectory) != []


def test_a_point_may_be_passed_nearer_than_the_rest() -> None:
    """Within its own tolerance, and in a time between those of the two tolerances."""
    points = list(through(STEPPED))
    points[1] = replace(points[1], tolerance=0.1)
    plan = pp.plan(PORTAL, job(STEPPED, pp.PathStep(tuple(points), tolerance=2.0)))
    assert failures(plan) == []
    sampled = plan.trajectory.at(np.linspace(0, plan.duration, 20001))
    assert np.linalg.norm(sampled - [100.0, 100.0], axis=1).min() <= 0.1 + 0.02
    assert planned().duration * (1 - GAP) <= plan.duration
    assert plan.duration <= planned(STEPPED, 0.1).duration * (1 + GAP)


# A time asked for


def roughness(trajectory: pp.Trajectory) -> float:
    """Return the mean square of the jerks over their limits, exactly: constant in each piece."""
    jerk = 6 * trajectory.coefficients[:, 3] / [axis.limits.jerk for axis in PORTAL.axes]
    return float((jerk**2).sum(axis=1) @ trajectory.durations / trajectory.duration)


@pytest.mark.parametrize("factor", [1.02, 1.5, 6.0])
def test_a_time_asked_for_is_taken_exactly_and_calmly(factor: float) -> None:
    """No rougher than the fastest motion played more slowly."""
    time = factor * planned().duration
    plan = planned(time=time)
    assert_allclose(plan.duration, time, rtol=1e-12)
    assert failures(plan) == []
    assert_within(plan, STEPPED, 2.0)
    stretched = planned().trajectory.stretched(time)
    assert roughness(plan.trajectory) <= roughness(stretched) * (1 + 1e-6)
    assert [(held.axis, held.quantity) for held in plan.steps[0].limited_by] == [(None, "time")]


def test_too_short_a_time_is_refused_with_the_least() -> None:
    """The message says what would be possible, and that is possible."""
    with pytest.raises(
        pp.PlanError, match=r"steps\[1\]\.time: 0\.1 s asked for; the least time"
    ) as e:
        planned(time=0.1)
    told = float(str(e.value).split()[-2])
    assert_allclose(told, planned().duration, atol=1e-6)
    assert failures(planned(time=told)) == []


def test_a_time_holds_for_runs_and_waits_together() -> None:
    """The waits stay as long as they are; the runs are slowed down."""
    points = list(through(STEPPED))
    points[1] = replace(points[1], wait=0.3)
    plan = pp.plan(PORTAL, job(STEPPED, pp.PathStep(tuple(points), tolerance=2.0, time=2.0)))
    assert_allclose(plan.duration, 2.0, rtol=1e-12)
    assert failures(plan) == []
    still = (plan.trajectory.coefficients[:, 1:] == 0).all(axis=(1, 2))
    assert_allclose(plan.trajectory.durations[still].sum(), 0.3, rtol=1e-9)


# What holds it back


@pytest.mark.parametrize("speed", [None, 400.0])
def test_stretches_cover_the_motion(speed: float | None) -> None:
    """Each ends where the next begins, and names what the machine or the step has."""
    step = planned(speed=speed).steps[0]
    assert_allclose(step.stretches[0].start, 0.0, atol=1e-12)
    assert_allclose(step.stretches[-1].end, step.duration, rtol=1e-5)
    for one, other in pairwise(step.stretches):
        assert_allclose(one.end, other.start, rtol=1e-12)
        assert one.limit != other.limit
    assert all(held.start < held.end for held in step.stretches)
    of_axes = {"velocity", "acceleration", "deceleration", "jerk"}
    allowed = {(axis, q) for axis in "xy" for q in of_axes} | {(None, "tolerance")}
    allowed |= {(None, "speed")} if speed else set()
    assert {(held.limit.axis, held.limit.quantity) for held in step.stretches} <= allowed


def test_stretches_leave_out_the_waits() -> None:
    """While it waits nothing but the wait holds a path back."""
    plan = waiting(0.3)
    stretches = plan.steps[0].stretches
    gaps = sorted(other.start - one.end for one, other in pairwise(stretches))
    assert_allclose(gaps, [0.0] * (len(gaps) - 1) + [0.3], rtol=1e-5, atol=1e-9)


def test_what_a_limit_saves_agrees_with_planning_again() -> None:
    """A tenth more of it, where that saves more than the search's own accuracy."""
    base = planned()
    compared = 0
    for held in base.steps[0].limited_by:
        if held.saves < 2e-3 * base.duration:
            continue
        compared += 1
        if held.axis is None:
            assert held.quantity == "tolerance"
            other = planned(tolerance=2.2)
        else:
            other = planned(of=raised(NAMES.index(held.axis), held.quantity, 1.1))
        saved = base.duration - other.duration
        message = f"{held.axis} {held.quantity}: {held.saves} s told, {saved} s saved"
        assert 0.5 * held.saves <= saved <= 2 * held.saves, message
    assert compared >= 3


def test_no_motion_beats_the_lower_bound() -> None:
    """To 100, a little back, and on to 199: within 5 mm no axis need ever turn back."""
    points = np.array([[0.0], [100.0], [99.0], [199.0]])
    none = np.full(1, np.inf)
    bounds = Bounds(
        np.array([2000.0]),
        np.array([12000.0]),
        np.array([12000.0]),
        none,
        speed=np.full(3, np.inf),
        linear=np.array([True]),
    )
    corridor = tubes(points, tolerance=5.0, linear=[True], angle_tolerance=0.5)
    straight = 2 * np.sqrt(199 / 12000)
    assert lower_bound(corridor, bounds, tolerance=5.0) <= straight * (1 + 1e-12)


# The judge


def test_a_shifted_motion_is_found() -> None:
    """Twice the tolerance beside the path."""
    plan = planned()
    coefficients = plan.trajectory.coefficients.copy()
    coefficients[:, 0, 1] += 4.0
    shifted = replace(plan.trajectory, coefficients=coefficients)
    assert any(f.startswith("tolerance of") for f in spoilt(plan, shifted))


def test_a_cut_corner_is_found() -> None:
    """A motion made for three times the tolerance."""
    wide = planned(tolerance=6.0).trajectory
    found = spoilt(planned(), wide)
    assert any(f.startswith("tolerance at corners") for f in found)
    assert any(f.startswith("tolerance of") for f in found)


def test_a_corner_left_out_is_found() -> None:
    """Straight on to the last point: on time, within all limits, and not on the path."""
    short = planned((STEPPED[0], STEPPED[1], STEPPED[3])).trajectory
    assert any(f.startswith("tolerance") for f in spoilt(planned(), short))


def test_a_spike_not_reached_is_found() -> None:
    """A motion along the same line that turns back too early is never beside the path."""
    plan = planned(((0, 0), (100, 0), (0, 0)))
    early = planned(((0, 0), (90, 0), (0, 0))).trajectory
    assert any(f.startswith("tolerance at corners") for f in spoilt(plan, early))


# Many problems


def random_problem(seed: int) -> tuple[pp.Machine, Points, float]:
    """Return limits, points and a tolerance, of the sizes of real machines."""
    random = np.random.default_rng(seed)
    width = int(random.integers(2, 4))
    count = 3 + int(6 * random.random() ** 3)
    size = 10 ** random.uniform(1.3, 3)
    points = np.round(random.uniform(0, size, (count + 1, width)), 2)
    tolerance = float(10 ** random.uniform(np.log10(0.05), np.log10(20)))
    acceleration = 10 ** random.uniform(3, 4.5, width)
    jerk = [
        None if random.random() < 0.25 else float(own * 10 ** random.uniform(0.7, 1.7))
        for own in acceleration
    ]
    slowing = float(random.choice([0.3, 1.0, 1.0, 3.0]))
    of = machine((10 ** random.uniform(2, 3.5, width)).tolist(), acceleration.tolist(), jerk)
    axes = tuple(replace(a, deceleration=slowing * a.acceleration) for a in of.axes)
    return replace(of, axes=axes), tuple(map(tuple, points.tolist())), tolerance


@pytest.mark.parametrize("seed", range(36))
def test_a_random_path_is_right(seed: int) -> None:
    """No limit and no tolerance passed, and never slower than stopping."""
    of, points, tolerance = random_problem(seed)
    plan = pp.plan(of, job(points, pp.PathStep(through(points), tolerance=tolerance)))
    stops = pp.plan(of, job(points, pp.PathStep(through(points))))
    assert failures(plan) == []
    assert_within(plan, points, tolerance)
    assert plan.duration <= stops.duration * (1 + 1e-12)
    assert not any("stop at every point" in note for note in plan.notes)


REFERENCE = json.loads(
    (Path(__file__).parent / "published" / "path-problems.json").read_text(encoding="utf-8")
)
FAST = (
    "u-shape-1",
    "u-shape-3d-1",
    "rectangle-1",
    "detour-1",
    "random-3d-1",
    "fine-tolerance-1",
)


@pytest.mark.parametrize(
    "problem",
    [problem for problem in REFERENCE if problem["name"] in FAST],
    ids=lambda problem: problem["name"],
)
def test_a_reference_problem_is_solved_as_well_as_known(problem: dict[str, float]) -> None:
    """Least times found with every axis free, by another search on a finer grid."""
    case = json.loads(json.dumps(problem))
    of = machine(case["velocity_mm_s"], case["acceleration_mm_s2"], case["jerk_mm_s3"])
    points = tuple(map(tuple, case["points_mm"]))
    plan = planned(points, case["tolerance_mm"], of)
    assert failures(plan) == []
    assert_array_less(plan.duration, BEST_FOUND * case["best_in_tolerance_s"])
    stops = planned(points, 0.0, of)
    assert_allclose(stops.duration, case["stop_at_every_point_s"], atol=5.1e-6)
