"""What a path with a tolerance may ask for, what holds it back, and whether its judge objects."""

from __future__ import annotations

import json
from dataclasses import replace
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

import profileplan as pp
from portal import (
    GAP,
    NAMES,
    PORTAL,
    SAMPLES,
    STEPPED,
    assert_within,
    failures,
    job,
    planned,
    raised,
    spoilt,
    through,
)
from profileplan.summary import summarise, text

if TYPE_CHECKING:
    from portal import Points

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


def test_a_path_may_begin_with_a_wait() -> None:
    """Its first point is where the machine stands; and a point may be waited at twice."""
    points = (
        pp.Waypoint({"x": 0.0}, wait=0.5),
        pp.Waypoint({"x": 100.0}, wait=0.2),
        pp.Waypoint({"x": 100.0}, wait=0.1),
        pp.Waypoint({"y": 100.0}),
    )
    plan = pp.plan(PORTAL, job(((0, 0),), pp.PathStep(points, tolerance=2.0)))
    legs = planned(((0, 0), (100, 0))).duration + planned(((100, 0), (100, 100))).duration
    assert_allclose(plan.duration, 0.8 + legs, rtol=1e-12)
    assert failures(plan) == []


def test_a_leg_after_a_wait_has_its_own_speed() -> None:
    """Also where all legs are inside the tolerance of each other."""
    legs: Points = ((0, 0), (10, 0), (10, 10), (2, 5))
    points = list(through(legs))
    points[0], points[1] = replace(points[0], speed=50.0), replace(points[1], speed=50.0, wait=0.1)
    plan = pp.plan(PORTAL, job(legs, pp.PathStep(tuple(points), tolerance=15.0)))
    assert failures(plan) == []


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
    """A tenth more of it, where that saves more than the search's own accuracy.

    The told saving is the slope at the limit; the least time is convex there, so that a tenth more
    saves no more than it, and the slope falls by a share not far from a tenth of its power.
    """
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
        noise = 1e-3 * base.duration
        assert 0.6 * held.saves - noise <= saved <= held.saves + noise, message
    assert compared >= 3


@pytest.mark.parametrize("speed", [None, 400.0])
def test_savings_agree_with_a_change_of_the_unit_of_time(speed: float | None) -> None:
    """Slower time by c is the same as velocity c, acceleration c^2 and jerk c^3 in the limits.

    So the slopes of the duration, each times its power, sum up to the duration (derived).
    """
    step = planned(speed=speed).steps[0]
    powers = {"speed": 1, "velocity": 1, "acceleration": 2, "deceleration": 2, "jerk": 3}
    total = sum(10 * powers.get(held.quantity, 0) * held.saves for held in step.limited_by)
    assert_allclose(total, step.duration, rtol=0.01)


def test_the_summary_tells_seconds_for_a_percent_and_for_a_mm() -> None:
    """The same savings in the units in which an engineer changes things."""
    plan = planned()
    summary = json.loads(text(summarise(plan)))
    gains = summary["steps"][0]["gains"]
    for gain, held in zip(gains, plan.steps[0].limited_by, strict=True):
        if held.quantity == "tolerance":
            assert_allclose(gain["s_per_mm"] * 0.1 * 2.0, held.saves, rtol=1e-12)
        else:
            assert_allclose(gain["s_per_percent"] * 10, held.saves, rtol=1e-12)


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
    assert any(f.startswith("tolerance") for f in found)


def test_a_corner_left_out_is_found() -> None:
    """Straight on to the last point: on time, within all limits, and not on the path."""
    short = planned((STEPPED[0], STEPPED[1], STEPPED[3])).trajectory
    assert any(f.startswith("tolerance") for f in spoilt(planned(), short))


def test_a_spike_not_reached_is_found() -> None:
    """A motion along the same line that turns back too early is never beside the path."""
    plan = planned(((0, 0), (100, 0), (0, 0)))
    early = planned(((0, 0), (90, 0), (0, 0))).trajectory
    assert any(f.startswith("tolerance") for f in spoilt(plan, early))
