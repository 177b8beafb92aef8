"""Plans: durations, synchronised arrival, what limits a step, events, and refusals."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_less

import profileplan as pp
from profileplan.inputs import LAW_NAMES

if TYPE_CHECKING:
    from profileplan.inputs import LawName, Step


def loader(up: str | None = None, keepouts: tuple[pp.Keepout, ...] = ()) -> pp.Machine:
    """Return a kiln loader with two linear axes, one without jerk limit, and a rotary one."""
    axes = (
        pp.Axis(
            "x",
            travel=(0.0, 2400.0),
            velocity=2000.0,
            acceleration=6000.0,
            deceleration=5000.0,
            jerk=80000.0,
        ),
        pp.Axis("z", travel=(0.0, 450.0), velocity=1200.0, acceleration=8000.0),
        pp.Axis(
            "c",
            kind="rotary",
            travel=(-180.0, 180.0),
            velocity=270.0,
            acceleration=1500.0,
            jerk=30000.0,
        ),
    )
    return pp.Machine(name="loader", axes=axes, up=up, keepouts=keepouts)


def cycle(*steps: Step, target: float | None = None) -> pp.Cycle:
    """Return a cycle from a fixed start."""
    start = {"x": 100.0, "z": 400.0, "c": 0.0}
    return pp.Cycle(steps=steps, start=start, target=target)


def limits_of(plan: pp.Plan, step: int) -> list[tuple[str | None, str]]:
    """Return what holds a step back."""
    return [(limit.axis, limit.quantity) for limit in plan.steps[step].limited_by]


@pytest.mark.parametrize("law", LAW_NAMES)
def test_all_axes_take_the_time_of_the_slowest(law: LawName) -> None:
    """Synchronised arrival: the slowest axis alone would take exactly as long."""
    plan = pp.plan(loader(), cycle(pp.Move({"x": 1100.0, "z": 300.0, "c": 90.0}, law=law)))
    alone = pp.plan(loader(), cycle(pp.Move({"x": 1100.0}, law=law)))
    assert_allclose(plan.duration, alone.duration, rtol=1e-14)
    late = plan.duration * (1 - 1e-3)
    moving = plan.trajectory.at([late], 1)[0]
    assert np.all(np.abs(moving) > 0), "every axis still moves shortly before the end"
    assert_allclose(plan.trajectory.last, [1100.0, 300.0, 90.0], atol=1e-9)


def test_earliest_arrival_stops_every_axis_as_soon_as_it_can() -> None:
    """An axis that is done can serve the next task before the slowest arrives."""
    target = {"x": 1100.0, "z": 300.0}
    plan = pp.plan(loader(), cycle(pp.Move(target, arrival="earliest")))
    alone = pp.plan(loader(), cycle(pp.Move({"z": 300.0})))
    assert alone.duration < plan.duration
    assert_allclose(plan.trajectory.at([alone.duration])[0, 1], 300.0, atol=1e-9)


def test_a_time_asked_for_is_taken_exactly() -> None:
    """A line that must keep step with a conveyor takes the time given."""
    steps = (
        pp.Move({"x": 1100.0}, time=2.0),
        pp.Line({"x": 300.0, "z": 100.0}, time=3.0),
        pp.PathStep((pp.Waypoint({"x": 400.0}, wait=0.5), pp.Waypoint({"z": 200.0})), time=4.0),
    )
    plan = pp.plan(loader(), cycle(*steps))
    assert_allclose([step.duration for step in plan.steps], [2.0, 3.0, 4.0], rtol=1e-13)
    assert limits_of(plan, 0) == [(None, "time")]
    assert all(finding.ok for finding in plan.check())


@pytest.mark.parametrize(
    "step",
    [
        pp.Move({"x": 1100.0}, time=0.1),
        pp.Line({"x": 1100.0}, time=0.1),
        pp.PathStep((pp.Waypoint({"x": 1100.0}),), time=0.1),
    ],
)
def test_a_time_too_short_is_refused_with_the_least(step: Step) -> None:
    """The message says what would be possible."""
    with pytest.raises(pp.PlanError, match=r"steps\[1\]\.time: 0\.1 s asked for; the least time"):
        pp.plan(loader(), cycle(step))


def test_a_time_asked_for_goes_with_arriving_together() -> None:
    """Each axis as soon as it can, and all in a given time: one contradicts the other."""
    with pytest.raises(pp.InputError, match="leave one out"):
        pp.Move({"x": 1100.0}, arrival="earliest", time=2.0)


def test_least_time_of_a_quintic_is_that_of_the_fastest_law() -> None:
    """The bound is proven: no motion under the limits beats the trapezoidal law."""
    target = {"x": 1100.0, "z": 100.0}
    for make in (pp.Move, pp.Line):
        quintic = pp.plan(loader(), cycle(make(target, law="quintic"))).steps[0]
        trapezoidal = pp.plan(loader(), cycle(make(target))).steps[0]
        least = [quintic.least_time or 0.0, trapezoidal.least_time or 0.0]
        assert_allclose(least, trapezoidal.duration, rtol=1e-14)
        assert least[1] <= trapezoidal.duration
        assert quintic.duration > trapezoidal.duration


def test_what_limits_a_step_is_what_makes_it_longer() -> None:
    """Every named limit, lowered alone, costs time; every other one costs none."""
    machine = loader()
    job = cycle(pp.Move({"x": 1100.0, "z": 300.0, "c": 20.0}))
    plan = pp.plan(machine, job)
    for index, axis in enumerate(machine.axes):
        for quantity in ("velocity", "acceleration", "deceleration", "jerk"):
            value = axis.limits._asdict()[quantity]
            if not np.isfinite(value):
                continue
            slower = replace(axis, **{quantity: 0.99 * value})
            axes = (*machine.axes[:index], slower, *machine.axes[index + 1 :])
            longer = pp.plan(replace(machine, axes=axes), job).duration > plan.duration + 1e-9
            assert longer == ((axis.name, quantity) in limits_of(plan, 0)), (axis.name, quantity)


def test_time_saved_is_what_planning_again_saves() -> None:
    """The advice is a plan under the raised limit, not an estimate."""
    machine = loader()
    job = cycle(pp.Move({"x": 1100.0, "z": 300.0}), pp.Line({"x": 700.0, "z": 100.0}, speed=500.0))
    plan = pp.plan(machine, job)
    for lever in plan.levers:
        axis_name, quantity = lever.limit.axis, lever.limit.quantity
        if axis_name is None:
            continue
        index = machine.axis_names.index(axis_name)
        axis = machine.axes[index]
        faster = replace(axis, **{quantity: 1.1 * axis.limits._asdict()[quantity]})
        axes = (*machine.axes[:index], faster, *machine.axes[index + 1 :])
        saved = plan.duration - pp.plan(replace(machine, axes=axes), job).duration
        assert_allclose(lever.limit.saves, saved, atol=1e-12)


def test_speed_limits_a_line_along_the_linear_axes() -> None:
    """Turning costs no speed along the path: only linear axes count."""
    plan = pp.plan(loader(), cycle(pp.Line({"x": 500.0, "z": 100.0, "c": 20.0}, speed=150.0)))
    assert limits_of(plan, 0)[0] == (None, "speed")
    velocity = plan.trajectory.at(np.linspace(0, plan.duration, 1001), 1)
    assert_allclose(np.hypot(velocity[:, 0], velocity[:, 1]).max(), 150.0, rtol=1e-12)


def test_a_path_without_tolerance_is_the_sum_of_its_lines() -> None:
    """Exact stop at every point: closed forms, and waits between them."""
    points = ({"x": 500.0}, {"z": 100.0, "c": 45.0}, {"x": 200.0})
    path = pp.PathStep(tuple(pp.Waypoint(to, wait=0.1) for to in points), speed=800.0, name="bead")
    plan = pp.plan(loader(), cycle(path))
    lines = pp.plan(loader(), cycle(*(pp.Line(to, speed=800.0) for to in points)))
    assert_allclose(plan.duration, lines.duration + 0.3, rtol=1e-14)
    assert plan.steps[0].name == "bead"


def test_a_point_has_a_speed_of_its_own() -> None:
    """A rebate is sealed more slowly than the straight before it."""
    points = (pp.Waypoint({"x": 700.0}), pp.Waypoint({"z": 100.0}, speed=50.0))
    plan = pp.plan(loader(), cycle(pp.PathStep(points, speed=400.0)))
    speed = np.abs(plan.trajectory.at(np.linspace(0, plan.duration, 20001), 1)[:, :2])
    assert_allclose(speed.max(axis=0), [400.0, 50.0], rtol=1e-9)


def test_signals_switch_by_their_lead() -> None:
    """A valve that takes 30 ms is opened 30 ms before arrival, or after it with a negative lead."""
    steps = (
        pp.Move({"x": 500.0}),
        pp.Signal({"vacuum": True}, lead=0.03),
        pp.Signal({"blow": True}, lead=-0.02),
        pp.Wait(0.1),
    )
    plan = pp.plan(loader(), cycle(*steps))
    arrival = plan.steps[0].end
    times = {event.signal: event.time for event in plan.events}
    assert_allclose([times["vacuum"], times["blow"]], [arrival - 0.03, arrival + 0.02])


@pytest.mark.parametrize(
    ("steps", "words"),
    [
        ((pp.Signal({"v": True}, lead=0.1), pp.Wait(1.0)), r"steps\[1\]\.lead: 0\.1 s.*-0\.1 s"),
        (
            (pp.Wait(1.0), pp.Signal({"v": True}, lead=-0.1)),
            r"steps\[2\].*1\.1 s; the cycle lasts from 0 to 1 s",
        ),
        (
            (
                pp.Wait(1.0),
                pp.Signal({"v": True}),
                pp.Wait(0.1),
                pp.Signal({"v": False}, lead=0.5),
                pp.Wait(1.0),
            ),
            r"steps\[4\].*before it switches at 1 s for an earlier step",
        ),
    ],
)
def test_signals_outside_the_cycle_or_out_of_order_are_refused(
    steps: tuple[Step, ...], words: str
) -> None:
    """A state that the table could not show, or a program that reads one way and runs another."""
    with pytest.raises(pp.PlanError, match=words):
        pp.plan(loader(), cycle(*steps))


def test_notes_say_what_does_not_enter_the_plan() -> None:
    """Nobody may believe that a load was looked at."""
    post = pp.Keepout(name="post", circle=pp.Circle(1000.0, 0.0, 50.0))
    steps = (pp.Payload(mass=3.0), pp.Move({"x": 900.0}))
    plan = pp.plan(loader(keepouts=(post,)), cycle(*steps))
    assert len(plan.notes) == 1
    assert pp.plan(loader(), cycle(pp.Wait(1.0))).notes == ()


def test_the_target_verdict() -> None:
    """None without a target, else whether the cycle is short enough."""
    steps = (pp.Wait(1.0),)
    assert pp.plan(loader(), cycle(*steps)).meets_target is None
    assert pp.plan(loader(), cycle(*steps, target=1.0)).meets_target is True
    assert pp.plan(loader(), cycle(*steps, target=0.99)).meets_target is False


def test_levers_come_in_order_of_the_time_that_they_save() -> None:
    """What helps most stands first, and its steps by the time that they take."""
    job = cycle(pp.Move({"x": 2000.0}), pp.Move({"x": 100.0}), pp.Move({"x": 300.0}), target=0.1)
    plan = pp.plan(loader(), job)
    saves = [lever.limit.saves for lever in plan.levers]
    assert saves == sorted(saves, reverse=True)
    assert plan.levers[0].limit.axis == "x"
    durations = {step.name: step.duration for step in plan.steps}
    for lever in plan.levers:
        times = [durations[name] for name in lever.steps]
        assert times == sorted(times, reverse=True)


def test_a_step_over_no_distance_takes_no_time() -> None:
    """A program may command where the machine stands already."""
    plan = pp.plan(loader(), cycle(pp.Move({"x": 100.0}), pp.Line({"z": 400.0}), pp.Wait(0.5)))
    assert [step.duration for step in plan.steps] == [0.0, 0.0, 0.5]
    assert all(finding.ok for finding in plan.check())


def test_a_cycle_file_and_its_records_give_the_same_plan() -> None:
    """The library and the command line share one way."""
    file = Path(__file__).parents[1] / "samples" / "kiln-loader" / "cycle.toml"
    job = pp.load_job(file)
    assert pp.plan(file).duration == pp.plan(job).duration
    assert pp.plan(job.machine, job.cycle).duration == pp.plan(job).duration


def test_wrong_arguments_are_told() -> None:
    """A machine alone is no job."""
    with pytest.raises(TypeError, match="plan\\(machine, cycle\\)"):
        pp.plan(loader())
    with pytest.raises(TypeError, match="plan\\(machine, cycle\\)"):
        pp.plan("cycle.toml", cycle(pp.Wait(1.0)))


def test_progress_reports_every_step() -> None:
    """A long job shows how far it is."""
    seen: list[tuple[float, int]] = []
    pp.plan(
        loader(),
        cycle(pp.Wait(1.0), pp.Wait(2.0)),
        progress=lambda done, total: seen.append((done, total)),
    )
    assert seen == [(1, 2), (2, 2)]


def test_axes_are_independent() -> None:
    """A Cartesian machine's Jacobian is the identity, so one axis moves without the others.

    Common practice, no source.
    """
    both = pp.plan(loader(), cycle(pp.Move({"x": 900.0, "z": 50.0}, arrival="earliest")))
    times = np.linspace(0.0, both.duration, 101)
    for column, to in ((0, {"x": 900.0}), (1, {"z": 50.0})):
        alone = pp.plan(loader(), cycle(pp.Move(to)))
        assert_allclose(
            both.trajectory.at(times)[:, column],
            alone.trajectory.at(times)[:, column],
            atol=1e-9,
        )


def test_a_rate_is_never_beyond_its_limit_between_rows() -> None:
    """The peaks that a plan reports are no smaller than what dense sampling finds."""
    plan = pp.plan(
        loader(), cycle(pp.Move({"x": 1100.0, "z": 50.0}), pp.Line({"x": 0.0, "c": 9.0}))
    )
    for step in plan.steps:
        times = np.linspace(0.0, step.duration, 5001)
        sampled = np.abs(step.trajectory.at(times, 1)).max(axis=0)
        assert_array_less(sampled, step.trajectory.peaks.velocity.value * (1 + 1e-12) + 1e-12)


@pytest.mark.parametrize("arrival", ["together", "earliest"])
def test_short_phases_late_in_long_moves_keep_their_limits(
    arrival: Literal["together", "earliest"],
) -> None:
    """A phase of 50 µs after 2000 s: differences of times would have lost its last digits."""
    axes = (
        pp.Axis("x", travel=(0.0, 8000.0), velocity=1.0, acceleration=50.0, jerk=1e6),
        pp.Axis("y", travel=(0.0, 8000.0), velocity=300.0, acceleration=1000.0, jerk=2e4),
    )
    machine = pp.Machine(name="slow", axes=axes)
    for way in (2000.0, 1777.3, 333.21):
        steps = (pp.Move({"x": way, "y": 3.7}, arrival=arrival),)
        plan = pp.plan(machine, pp.Cycle(steps=steps, start={"x": 0.0, "y": 0.0}))
        assert [f for f in plan.check() if not f.ok] == []


@pytest.mark.parametrize("law", LAW_NAMES)
@pytest.mark.parametrize("travel", [1e6, 1e7])
def test_long_travels_arrive(law: LawName, travel: float) -> None:
    """Up to the longest travel that is taken, an end is met as finely as numbers are."""
    axis = pp.Axis("x", travel=(-travel, travel), velocity=3000.0, acceleration=9000.0)
    machine = pp.Machine(name="long", axes=(axis,))
    random = np.random.default_rng(3)
    for _ in range(20):
        steps = tuple(pp.Move({"x": float(random.uniform(-travel, travel))}, law=law) for _ in "ab")
        plan = pp.plan(machine, pp.Cycle(steps=steps, start={"x": 0.0}))
        assert [f for f in plan.check() if not f.ok] == []


def test_ways_smaller_than_any_machines_are_none() -> None:
    """A way of 1e-300 mm is a slip of arithmetic, no motion."""
    plan = pp.plan(loader(), cycle(pp.Line({"x": 100.0 + 1e-13, "c": 1e-300}), pp.Wait(0.1)))
    assert plan.steps[0].duration == 0.0


@pytest.mark.parametrize("wrong", [np.nan, 0.0, -1.0])
def test_laws_refuse_limits_that_are_none(wrong: float) -> None:
    """A limit is above 0; a distance is a number."""
    for law in pp.LAWS.values():
        with pytest.raises(ValueError, match="limits above 0"):
            law.solve(1.0, pp.Limits(wrong, 1.0, 1.0, 1.0))
        with pytest.raises(ValueError, match="finite"):
            law.solve(np.nan, pp.Limits(1.0, 1.0, 1.0, 1.0))


def test_a_very_slow_long_move_shows_its_accelerations() -> None:
    """A month of creeping: a limit broken in its first instants must be found all the same."""
    axis = pp.Axis("x", travel=(0.0, 1000.0), velocity=1e-4, acceleration=1e4)
    cycle = pp.Cycle(steps=(pp.Move({"x": 1000.0}),), start={"x": 0.0})
    plan = pp.plan(pp.Machine(name="creeper", axes=(axis,)), cycle)
    found = {finding.check: finding.value for finding in plan.check()}
    assert_allclose([found["acceleration"], found["deceleration"]], 1e4, rtol=1e-12)


def test_a_time_short_by_rounding_speeds_no_move_up() -> None:
    """What may fall short of the least time by rounding must not pass a limit by it."""
    limits = pp.Limits(5.0, 10.0, 10.0, 30.0)
    moves = pp.LAWS["trapezoidal"].solve(10.0, limits)
    assert float(moves.stretched(moves.duration * (1 - 9e-10)).jerk) <= 30.0
