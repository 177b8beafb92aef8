"""Paths with a tolerance: how soon, and inside what.

Two plans of the same problem, seen from another side, differ by the search's own gap: ``GAP``.
"""

from __future__ import annotations

import json
import os
from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal, assert_array_less

import profileplan as pp
from portal import (
    GAP,
    PORTAL,
    SLACK,
    STEPPED,
    assert_within,
    failures,
    job,
    machine,
    planned,
    raised,
    spoilt,
    through,
)
from profileplan.geometry.corridor import tubes
from profileplan.motion import least_time as search
from profileplan.motion.least_time import lower_bound
from profileplan.motion.rounds import Bounds

if TYPE_CHECKING:
    from portal import Points
    from profileplan.motion.polynomials import Array

BEST_FOUND = 1.005
"""Greatest duration over the best found by an earlier search on a finer grid: the project's aim."""


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
    "small": (((0, 0), (10, 0), (10, 10), (0, 10)), 8.0, PORTAL),
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


def test_a_path_smaller_than_its_tolerance_is_right() -> None:
    """Hardly any motion is needed, and at the end none, to be near all of it."""
    points = ((0, 0), (1, 0), (1, 1), (0, 0))
    plan = planned(points, 5.0)
    assert failures(plan) == []
    assert_within(plan, points, 5.0)
    assert plan.duration < planned(points, 0.0).duration


def test_the_motion_stays_in_the_travel() -> None:
    """A path along the end of the travel: only one side of its tube can be used."""
    axes = tuple(replace(axis, travel=(0.0, 2000.0)) for axis in PORTAL.axes)
    of = replace(PORTAL, axes=axes)
    plan = planned(((0, 0), (0, 500), (500, 500)), 20.0, of)
    assert failures(plan) == []


# Never more time for more room


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
        bounds = [
            (1 - direction * np.sign(by_growth) * by_square * square) / abs(by_growth)
            for by_growth, by_square in ((-sine, -cosine), (cosine, -sine))
            if abs(by_growth) > 1e-12
        ]
        return float(min(bounds))

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


LONG: dict[str, Points] = {
    "chords of a wave": tuple(
        (22.5 * i, 120 * float(np.sin(2 * np.pi * i / 20))) for i in range(101)
    ),
    "zigzag": tuple((15.0 * i, 40.0 * (i % 2) + 3.0 * (i % 5)) for i in range(101)),
}
"""Paths that are planned in several parts."""


@pytest.mark.parametrize("name", LONG)
def test_a_long_path_loses_little_by_its_parts(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """At most a thousandth against one part for all."""
    step = pp.PathStep(through(LONG[name]), tolerance=0.5)
    in_parts = pp.plan(PORTAL, job(LONG[name], step))
    assert failures(in_parts) == []
    monkeypatch.setattr(search, "WINDOW", 1000)
    at_once = pp.plan(PORTAL, job(LONG[name], step))
    assert in_parts.duration <= at_once.duration * 1.001


def test_a_long_path_is_the_same_on_any_number_of_cores(monkeypatch: pytest.MonkeyPatch) -> None:
    """Its parts do not depend on which is planned first."""
    points = LONG["zigzag"]
    step = pp.PathStep(through(points), tolerance=0.5)
    motions = []
    for cores in (1, 2, 5):
        monkeypatch.setattr(os, "cpu_count", lambda cores=cores: cores)
        motions.append(pp.plan(PORTAL, job(points, step)).trajectory)
    for other in motions[1:]:
        assert other.durations.tobytes() == motions[0].durations.tobytes()
        assert other.coefficients.tobytes() == motions[0].coefficients.tobytes()


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


@pytest.mark.parametrize("seed", range(300))
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


@pytest.mark.parametrize(
    "problem",
    REFERENCE,
    ids=lambda problem: problem["name"],
)
def test_a_reference_problem_is_solved_as_well_as_known(problem: dict[str, float]) -> None:
    """Least times found with every axis free, by another search on a finer grid."""
    case = json.loads(json.dumps(problem))
    of = machine(case["velocity_mm_s"], case["acceleration_mm_s2"], case["jerk_mm_s3"])
    points = tuple(map(tuple, case["points_mm"]))
    plan = planned(points, case["tolerance_mm"], of, speed=case["speed_mm_s"])
    assert failures(plan) == []
    assert_array_less(plan.duration, BEST_FOUND * case["best_in_tolerance_s"])
    stops = planned(points, 0.0, of, speed=case["speed_mm_s"])
    assert_allclose(stops.duration, case["stop_at_every_point_s"], atol=5.1e-6)
