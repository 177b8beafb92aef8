"""Checks find what is wrong: each is shown a schedule or a table spoiled in one place."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest
from numpy.testing import assert_allclose

import profileplan as pp
from profileplan.motion.schedule import Schedule, ScheduledStep

if TYPE_CHECKING:
    from pathlib import Path

    from profileplan.inputs import Step

MACHINE = pp.Machine(
    name="portal",
    axes=(
        pp.Axis(
            "x",
            travel=(0.0, 800.0),
            velocity=500.0,
            acceleration=3000.0,
            deceleration=2000.0,
            jerk=60000.0,
        ),
        pp.Axis("z", travel=(0.0, 120.0), velocity=200.0, acceleration=2000.0),
    ),
)


def plan(*steps: Step, target: float | None = None) -> pp.Plan:
    """Plan steps from x 100, z 80."""
    cycle = pp.Cycle(steps=steps, start={"x": 100.0, "z": 80.0}, target=target)
    return pp.plan(MACHINE, cycle)


GOOD = plan(
    pp.Move({"x": 700.0, "z": 20.0}),
    pp.Wait(0.2),
    pp.Line({"x": 400.0, "z": 60.0}, speed=120.0),
    pp.PathStep((pp.Waypoint({"x": 300.0}), pp.Waypoint({"z": 10.0}, speed=50.0))),
    target=10.0,
)


def spoiled(step: int, change: pp.Trajectory) -> pp.Plan:
    """Return the good plan with another trajectory in one step."""
    steps = list(GOOD.steps)
    steps[step] = replace(steps[step], trajectory=change)
    return replace(GOOD, steps=tuple(steps))


def failed(schedule: pp.Plan) -> set[tuple[str, str | None]]:
    """Return what is not met."""
    return {(finding.check, finding.axis) for finding in pp.check(schedule) if not finding.ok}


def scaled(step: int, *, time: float = 1.0, way: float = 1.0) -> pp.Trajectory:
    """Return a step's trajectory run faster, or over a longer way from its start."""
    motion = GOOD.steps[step].trajectory
    motion = motion.stretched(motion.duration * time)
    coefficients = motion.coefficients.copy()
    coefficients[:, 0] = motion.first + way * (coefficients[:, 0] - motion.first)
    coefficients[:, 1:] *= way
    return replace(motion, coefficients=coefficients)


def test_a_good_plan_meets_every_requirement() -> None:
    """What the planner makes, an independent judge accepts."""
    assert failed(GOOD) == set()


def test_every_limit_has_a_finding() -> None:
    """A requirement that is not listed was not looked at."""
    names = {(finding.check, finding.axis) for finding in GOOD.check()}
    for axis in ("x", "z"):
        for check in (
            "travel, low end",
            "travel, high end",
            "velocity",
            "acceleration",
            "deceleration",
            "position jump",
            "velocity jump",
            "arrival",
        ):
            assert (check, axis) in names
    assert {("jerk", "x"), ("acceleration jump", "x")} <= names
    assert not {("jerk", "z"), ("acceleration jump", "z")} & names, "z has no jerk limit"
    whole = {("waypoints", None), ("speed", None), ("time asked for", None), ("cycle time", None)}
    assert whole <= names


def test_values_are_the_exact_peaks() -> None:
    """A finding tells the value, its use, when and where."""
    found = {(finding.check, finding.axis): finding for finding in GOOD.check()}
    velocity = found["velocity", "x"]
    assert_allclose(velocity.value, 500.0, rtol=1e-12)
    assert_allclose(velocity.use or 0.0, 1.0, rtol=1e-12)
    assert velocity.step == "move 1"
    at = GOOD.trajectory.at([velocity.time or 0.0], 1)[0, 0]
    assert_allclose(at, 500.0, rtol=1e-9)
    assert found["travel, low end", "z"].margin == pytest.approx(10.0, abs=1e-9)


def test_a_motion_run_too_fast_breaks_its_limits() -> None:
    """Two percent less time: velocity 2, acceleration 4, jerk 6 percent too high."""
    broken = failed(spoiled(0, scaled(0, time=0.98)))
    assert {
        ("velocity", "x"),
        ("acceleration", "x"),
        ("deceleration", "x"),
        ("jerk", "x"),
    } <= broken


def test_a_billionth_beyond_a_limit_is_found() -> None:
    """The tolerance of a limit is 1e-9 of it, no more."""
    assert ("velocity", "x") in failed(spoiled(0, scaled(0, time=1 - 3e-9)))
    assert failed(spoiled(0, scaled(0, time=1 - 1e-12))) == set()


def test_acceleration_and_deceleration_are_told_apart() -> None:
    """Reversed in time, x speeds up at its limit of slowing down, and slows down too hard."""
    machine = replace(MACHINE, axes=(replace(MACHINE.axes[0], jerk=None), MACHINE.axes[1]))
    cycle = pp.Cycle(steps=(pp.Move({"x": 700.0}),), start={"x": 100.0, "z": 80.0})
    good = pp.plan(machine, cycle)
    peaks = {f.check: f.value for f in good.check() if f.axis == "x"}
    assert_allclose([peaks["acceleration"], peaks["deceleration"]], [3000.0, 2000.0], rtol=1e-12)
    softer = replace(machine.axes[0], acceleration=2000.0, deceleration=3000.0)
    job = pp.Job(replace(machine, axes=(softer, machine.axes[1])), cycle)
    assert ("acceleration", "x") in failed(replace(good, job=job))


def test_travel_is_judged_between_breaks() -> None:
    """An overshoot inside a piece counts, even though both its ends are inside the travel."""
    over = np.zeros((1, 6, 2))
    over[0, :3, 0] = [790.0, 100.0, -100.0]
    over[0, 0, 1] = 80.0
    motion = pp.Trajectory(("x", "z"), np.array([1.0]), over)
    found = [f for f in pp.check(spoiled(1, motion)) if f.check == "travel, high end"]
    assert not found[0].ok
    assert_allclose(found[0].value, 815.0, rtol=1e-12)
    assert_allclose(found[0].margin, -15.0, rtol=1e-12)


def test_a_gap_between_steps_is_a_jump() -> None:
    """A drive would be commanded to leap."""
    gone = pp.Trajectory.rest(("x", "z"), np.array([700.0, 20.001]), 0.2)
    assert {("position jump", "z"), ("arrival", "z")} <= failed(spoiled(1, gone))


def test_a_step_that_ends_with_a_velocity_is_a_jump() -> None:
    """Steps begin and end at rest."""
    motion = GOOD.steps[0].trajectory
    cut = replace(motion, durations=motion.durations[:1], coefficients=motion.coefficients[:1])
    assert {("velocity jump", "x"), ("acceleration jump", "x")} <= failed(spoiled(0, cut))


def test_a_step_that_ends_elsewhere_misses_its_arrival() -> None:
    """The cycle file says where a step ends, not the planner."""
    assert ("arrival", "x") in failed(spoiled(0, scaled(0, way=1 - 1e-6)))


def test_a_point_passed_by_is_found() -> None:
    """A path without tolerance stops at every point."""
    short = pp.Trajectory.chain(
        [plan(pp.Move({"x": 400.0, "z": 60.0})).steps[0].trajectory, GOOD.steps[3].trajectory]
    )
    assert failed(spoiled(3, short)) >= {("position jump", "x")}
    direct = pp.plan(
        MACHINE, pp.Cycle(steps=(pp.Line({"x": 300.0, "z": 10.0}),), start={"x": 400.0, "z": 60.0})
    )
    assert ("waypoints", None) in failed(spoiled(3, direct.steps[0].trajectory))


def test_speed_is_judged_piece_by_piece() -> None:
    """The slow stretch of a path is bounded by its own speed, not by that of the others."""
    steps = list(GOOD.job.cycle.steps)
    points = (pp.Waypoint({"x": 300.0}), pp.Waypoint({"z": 10.0}, speed=49.9))
    steps[3] = pp.PathStep(points)
    job = pp.Job(MACHINE, replace(GOOD.job.cycle, steps=tuple(steps)))
    found = {f.check: f for f in pp.check(replace(GOOD, job=job))}
    assert not found["speed"].ok
    assert_allclose([found["speed"].value, found["speed"].limit], [50.0, 49.9], rtol=1e-9)


def test_a_missed_target_and_a_missed_time_are_findings() -> None:
    """What was asked for is a requirement like any other."""
    cycle = replace(GOOD.job.cycle, target=1.0)
    assert ("cycle time", None) in failed(replace(GOOD, job=pp.Job(MACHINE, cycle)))
    longer = pp.Trajectory.rest(("x", "z"), np.array([700.0, 20.0]), 0.3)
    assert ("time asked for", None) in failed(spoiled(1, longer))


def test_checks_know_schedules_of_any_maker() -> None:
    """A schedule that no planner made is judged the same."""
    steps = tuple(
        ScheduledStep(step.name, step.kind, step.start, step.trajectory) for step in GOOD.steps
    )
    schedule = Schedule(GOOD.job, steps, GOOD.events)
    assert GOOD.check() == pp.check(schedule)


TABLE = GOOD.setpoints(period=0.001)


def table_failed(table: pp.SetpointTable) -> set[tuple[str, str | None]]:
    """Return what a table does not meet."""
    return {(f.check, f.axis) for f in pp.check_table(table, MACHINE) if not f.ok}


def moved(row: int, by: float) -> pp.SetpointTable:
    """Return the good table with one position of x moved."""
    position = TABLE.position.copy()
    position[row, 0] += by
    return replace(TABLE, position=position)


def test_the_good_table_meets_every_requirement() -> None:
    """Means of derivatives keep the limits of the derivatives."""
    assert table_failed(TABLE) == set()


def test_a_leap_in_a_table_breaks_every_difference() -> None:
    """One wrong row is a velocity, an acceleration and a jerk."""
    assert {("velocity", "x"), ("acceleration", "x"), ("jerk", "x")} <= table_failed(
        moved(200, 1.0)
    )


def test_a_tenth_of_a_micrometre_in_a_table_breaks_the_jerk() -> None:
    """At 1 ms, 10 nm in one row is 30,000 mm/s³ of third difference; 100 nm is above the limit."""
    assert table_failed(moved(GOOD_REST, 1e-5)) == set()
    assert table_failed(moved(GOOD_REST, 1e-4)) == {("jerk", "x")}


GOOD_REST = int((GOOD.steps[1].start + 0.1) * 1000)


def test_a_table_outside_the_travel_is_found() -> None:
    """A limit switch is no brake."""
    shifted = replace(TABLE, position=TABLE.position + np.array([200.0, 0.0]))
    assert ("travel, high end", "x") in table_failed(shifted)


def test_a_table_that_does_not_end_at_rest_is_found() -> None:
    """The machine stands after the last row, so what still moves there stops at once."""
    cut = replace(TABLE, time=TABLE.time[:150], position=TABLE.position[:150])
    assert ("deceleration", "x") in table_failed(cut) or ("acceleration", "x") in table_failed(cut)


def test_an_uneven_period_is_found() -> None:
    """A drive interpolates between ticks of one period."""
    time = TABLE.time.copy()
    time[100:] += 1e-6
    assert ("even period", None) in table_failed(replace(TABLE, time=time))


def test_turning_round_between_rows_raises_no_false_alarm() -> None:
    """Where the direction may have changed, the greater of both limits counts."""
    there_and_back = plan(pp.Move({"x": 101.0}), pp.Move({"x": 100.0}), pp.Move({"x": 100.5}))
    for period in (0.0005, 0.003, 0.01):
        assert table_failed(there_and_back.setpoints(period=period)) == set()


def test_rounding_is_allowed_for_and_told(tmp_path: Path) -> None:
    """Nine decimals at 50 µs are 32,000 mm/s³ of third difference: rounding, not motion."""
    file = tmp_path / "table.csv"
    pp.write_csv(GOOD, file, period=0.00005, columns=["pos"])
    findings = pp.check_table(pp.read_csv(file, MACHINE), MACHINE)
    jerk = next(f for f in findings if f.check == "jerk")
    assert_allclose(jerk.rounding, 4e-9 / 0.00005**3, rtol=0.01)
    assert all(f.ok for f in findings)
