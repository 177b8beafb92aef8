"""Forces, torques and what motors bear, against worked examples and by other routes."""

from __future__ import annotations

import csv
import json
import math
import subprocess
import sys
from dataclasses import replace
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.integrate import quad

import profileplan as pp
from profileplan import setpoints
from profileplan.inputs import Drive, Twin
from profileplan.motion.schedule import Schedule, ScheduledStep
from profileplan.setpoints import Content

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from conftest import Row
    from profileplan.inputs import LawName, Step

G = 9.80665  # m/s², standard gravity

FAST = 1e9  # mm/s and so on: no limit
EXACT = 1e-9  # relative: roots and sums in double precision


def machine(
    mechanics: pp.Mechanics,
    *,
    up: str | None = None,
    velocity: float = FAST,
    acceleration: float = FAST,
    deceleration: float | None = None,
    jerk: float | None = None,
) -> pp.Machine:
    """Return a machine with one linear axis, whose limits are far away unless given."""
    own = pp.Axis(
        "x",
        travel=(-1e6, 1e6),
        velocity=velocity,
        acceleration=acceleration,
        deceleration=deceleration,
        jerk=jerk,
        mechanics=mechanics,
    )
    return pp.Machine("axis", (own,), up=up)


def plan(own: pp.Machine, *steps: Step, start: float = 0.0) -> pp.Plan:
    """Plan steps of the axis x."""
    return pp.plan(own, pp.Cycle(steps=steps, start={"x": start}))


def load(schedule: Schedule) -> pp.AxisLoad:
    """Return the load of the only axis with mechanics."""
    (own,) = pp.loads(schedule)
    return own


def torques(schedule: Schedule) -> tuple[float, float]:
    """Return the least and the greatest torque of the only axis [N·m]."""
    found = load(schedule).torque
    assert found is not None
    return found[0].value, found[1].value


# --- values from outside


@pytest.mark.published("axis-loads.toml", "slide_forces")
def test_forces_of_a_slide_with_seals_are_those_of_the_example(row: Row) -> None:
    """Mass, friction of the weight and of the seals, each with its sign."""
    own = row.given
    ramp = own["velocity"] / own["ramp"]
    mechanics = pp.Mechanics(mass=own["mass"], friction=own["friction"], drag=own["drag"])
    motion = plan(
        machine(mechanics, velocity=own["velocity"], acceleration=ramp), pp.Move({"x": 1000.0})
    )
    found = load(motion)
    assert found.force is not None
    row.assert_printed(
        speeding_up=found.force[1].value,
        running=pp.forces(motion, [motion.duration / 2])["x"],
        slowing_down=found.force[0].value,
    )


@pytest.mark.published("axis-loads.toml", "screw_axis")
def test_torques_of_a_screw_axis_are_those_of_the_example(row: Row) -> None:
    """A motor is chosen by its peak and its mean torque, standstill included."""
    own = row.given
    velocity = own["distance"] / (own["ramp"] + own["cruise"])
    mechanics = pp.Mechanics(
        mass=0.0,
        drag=own["drag"],
        lead=own["lead"],
        efficiency=own["efficiency"],
        inertia=own["inertia"],
    )
    motion = plan(
        machine(mechanics, velocity=velocity, acceleration=velocity / own["ramp"]),
        pp.Move({"x": own["distance"]}),
        pp.Wait(own["cycle"] - 2 * own["ramp"] - own["cruise"]),
    )
    found = load(motion)
    assert found.speed is not None
    low, high = torques(motion)
    row.assert_printed(
        speed=found.speed.value,
        speeding_up=high,
        running=pp.torques(motion, [0.5])["x"],
        slowing_down=low,
        rms=found.rms_torque or 0.0,
    )


@pytest.mark.published("axis-loads.toml", "reduced_inertia")
def test_a_mass_is_worth_at_the_shaft_what_the_examples_say(row: Row) -> None:
    """Torque over angular acceleration is the inertia that the motor feels."""
    mechanics = pp.Mechanics(
        mass=row.given["mass"], lead=row.given["lead"], inertia=row.given["inertia"]
    )
    motion = plan(machine(mechanics, acceleration=1000.0), pp.Move({"x": 100.0}))
    angular = 1000.0 * 2 * math.pi / row.given["lead"]
    row.assert_printed(inertia=torques(motion)[1] / angular)


@pytest.mark.published("axis-loads.toml", "feed_axis")
def test_a_feed_axis_takes_the_torque_of_the_example(row: Row) -> None:
    """Friction counts through the loss of the screw, its nut's own friction at the shaft."""
    own = row.given
    mechanics = pp.Mechanics(
        mass=own["weight"] / G,
        friction=own["friction"],
        drag=own["friction"] * own["gib"],
        lead=own["lead"],
        efficiency=own["efficiency"],
        drag_torque=own["drag_torque"],
    )
    motion = plan(machine(mechanics, velocity=100.0, acceleration=1000.0), pp.Move({"x": 1000.0}))
    middle = [motion.duration / 2]
    row.assert_printed(force=pp.forces(motion, middle)["x"], torque=pp.torques(motion, middle)["x"])


@pytest.mark.published("axis-loads.toml", "rack")
def test_a_rack_takes_the_force_of_the_example(row: Row) -> None:
    """Acceleration and friction add up."""
    mechanics = pp.Mechanics(mass=row.given["mass"], friction=row.given["friction"])
    motion = plan(
        machine(mechanics, acceleration=row.given["acceleration"]), pp.Move({"x": 1000.0})
    )
    found = load(motion)
    assert found.peak_force is not None
    row.assert_printed(force=found.peak_force.value)


@pytest.mark.published("axis-loads.toml", "disc")
def test_a_disc_that_hangs_at_a_turning_tool_has_the_inertia_of_the_example(row: Row) -> None:
    """A round payload is a disc about the tool point."""
    axis = pp.Axis(
        "c",
        kind="rotary",
        travel=(-360.0, 360.0),
        velocity=FAST,
        acceleration=1000.0,
        mechanics=pp.Mechanics(load_inertia=0.0),
    )
    disc = pp.Payload(row.given["mass"], radius=row.given["diameter"] / 2)
    cycle = pp.Cycle(steps=(disc, pp.Move({"c": 90.0})), start={"c": 0.0})
    found = torques(pp.plan(pp.Machine("turner", (axis,)), cycle))[1]
    row.assert_printed(inertia=found / math.radians(1000.0))


@pytest.mark.published("axis-loads.toml", "power_screw")
def test_a_power_screw_has_the_efficiency_of_the_example(row: Row) -> None:
    """What lifts without loss, over what lifts, is the efficiency."""
    mechanics = pp.Mechanics(mass=row.given["force"] / G, lead=row.given["lead"])
    held = plan(machine(mechanics, up="+x"), pp.Wait(1.0))
    row.assert_printed(efficiency=torques(held)[1] / row.given["raising"])


def test_the_best_gear_of_a_pure_inertia_is_the_root_of_the_ratio() -> None:
    """Common result, no source: root of load inertia over motor inertia, here 20."""
    peaks = {}
    for ratio in (19, 20, 21):
        axis = pp.Axis(
            "c",
            kind="rotary",
            travel=(-360.0, 360.0),
            velocity=FAST,
            acceleration=1000.0,
            mechanics=pp.Mechanics(load_inertia=0.04, inertia=1e-4, gear=(ratio, 1)),
        )
        cycle = pp.Cycle(steps=(pp.Move({"c": 90.0}),), start={"c": 0.0})
        peaks[ratio] = torques(pp.plan(pp.Machine("turner", (axis,)), cycle))[1]
    assert peaks[20] < min(peaks[19], peaks[21])


# --- another route: the formula written out once more, sampled and integrated

LOSSY = pp.Mechanics(
    mass=13.0,
    drag=20.0,
    damping=35.0,
    counterbalance=60.0,
    lead=25.0,
    gear=(3, 2),
    inertia=1.6e-4,
    efficiency=0.7,
    drag_torque=0.08,
)

LIFT = machine(LOSSY, up="-x", velocity=900.0, acceleration=7000.0, deceleration=5000.0, jerk=9e4)

BOBBING = plan(
    LIFT,
    pp.Move({"x": 300.0}),
    pp.Wait(0.1),
    pp.Payload(4.1),
    pp.Move({"x": 20.0}, law="quintic"),
    pp.PathStep((pp.Waypoint({"x": 240.0}), pp.Waypoint({"x": 100.0})), tolerance=1.0),
    pp.Payload(),
)


def torque_by_hand(schedule: Schedule, time: float) -> float:
    """Return the torque of the lift [N·m], its position counted downward."""
    velocity, acceleration = (
        float(schedule.trajectory.at([time], order)[0, 0]) / 1000 for order in (1, 2)
    )
    payload = 4.1 if time >= schedule.steps[2].start else 0.0
    turned = 2 * math.pi * 1.5 / 0.025  # rad of the motor to a metre
    way = 0.0 if abs(velocity) < 1e-9 else math.copysign(1.0, velocity)
    force = (13.0 + payload) * (acceleration - G) + 60.0 + 20.0 * way + 35.0 * velocity
    driving = force * way
    share = 1 / 0.7 if driving > 0 else 0.7 if driving < 0 else 1.0
    return force / turned * share + 1.6e-4 * acceleration * turned + 0.08 * way


def test_sampled_torques_are_those_of_the_formula_written_out() -> None:
    """Every sign: up and down, driving and driven, with and without payload."""
    times = np.linspace(0.0, BOBBING.duration * (1 - 1e-9), 4001)
    expected = [torque_by_hand(BOBBING, time) for time in times.tolist()]
    assert_allclose(pp.torques(BOBBING, times)["x"], expected, rtol=EXACT, atol=1e-12)


def test_extremes_are_those_of_dense_samples() -> None:
    """No sample is beyond an extreme, and some sample comes near it."""
    times = np.linspace(0.0, BOBBING.duration, 200_001)
    sampled, forces = pp.torques(BOBBING, times)["x"], pp.forces(BOBBING, times)["x"]
    found = load(BOBBING)
    assert found.force is not None
    for (low, high), values in (
        (torques(BOBBING), sampled),
        ((found.force[0].value, found.force[1].value), forces),
    ):
        least, most = float(values.min()), float(values.max())
        assert low <= least + 1e-9
        assert high >= most - 1e-9
        assert_allclose([low, high], [least, most], rtol=2e-4)


def test_extremes_are_taken_where_they_are_said_to_be() -> None:
    """Time and step of a peak lead to what must be changed."""
    found = load(BOBBING)
    assert found.torque is not None
    assert found.power is not None
    for instant in found.torque:
        step = next(step for step in BOBBING.steps if step.name == instant.step)
        assert step.start - 1e-9 <= instant.time <= step.end + 1e-9
        near = np.clip(instant.time + np.array([-1e-9, 1e-9]), 0, BOBBING.duration)
        gap = np.abs(pp.torques(BOBBING, near)["x"] - instant.value).min()
        assert gap < 1e-5 * abs(instant.value)


def test_powers_are_torque_by_speed() -> None:
    """The power of the drive, and what it must take back while the load drives it."""
    times = np.linspace(0.0, BOBBING.duration, 200_001)
    speed = BOBBING.trajectory.at(times, 1)[:, 0] / 1000 * 2 * math.pi * 1.5 / 0.025
    power = pp.torques(BOBBING, times)["x"] * speed
    found = load(BOBBING)
    assert found.power is not None
    assert found.speed is not None
    values = [instant.value for instant in found.power]
    assert_allclose(values, [power.min(), power.max()], rtol=1e-4)
    assert values[0] < 0 < values[1]
    assert_allclose(found.speed.value, np.abs(speed).max() * 30 / math.pi, rtol=1e-6)


def test_the_mean_torque_is_that_of_numerical_integration() -> None:
    """Root of the mean square by adaptive quadrature (scipy), piece by piece."""
    breaks = BOBBING.trajectory.breaks
    squares = sum(
        quad(lambda time: torque_by_hand(BOBBING, time) ** 2, begin, end, limit=200)[0]
        for begin, end in pairwise(breaks.tolist())
        if end - begin > 1e-9
    )
    expected = math.sqrt(squares / BOBBING.duration)
    assert_allclose(load(BOBBING).rms_torque or 0.0, expected, rtol=1e-7)


def test_a_motion_that_stops_without_jerk_limit_is_braked_by_friction_to_the_end() -> None:
    """At the instant of standstill friction is gone; the extreme is that of the motion before."""
    mechanics = pp.Mechanics(mass=10.0, drag=8.0, lead=20.0)
    motion = plan(machine(mechanics, acceleration=1000.0), pp.Move({"x": 123.4}))
    found = load(motion)
    assert found.force is not None
    assert_allclose([one.value for one in found.force], [-10.0 + 8.0, 10.0 + 8.0], rtol=EXACT)


def played(own: pp.Machine, *coefficients: Sequence[float], duration: float) -> pp.Plan:
    """Return a schedule of one step, whose pieces are polynomials of mm and s."""
    pieces = np.zeros((len(coefficients), 6, 1))
    for piece, row in zip(pieces, coefficients, strict=True):
        piece[: len(row), 0] = row
    motion = pp.Trajectory(("x",), np.full(len(coefficients), duration), pieces)
    rest = plan(own, pp.Wait(1.0))
    return replace(rest, steps=(replace(rest.steps[0], trajectory=motion),))


def test_a_standstill_that_rounding_puts_before_the_end_is_no_part_of_the_motion() -> None:
    """There friction would seem to be gone while the axis still slows down."""
    mechanics = pp.Mechanics(mass=10.0, drag=8.0)
    found = load(played(machine(mechanics), [0.0, 1000.0, -500.0 * (1 + 1e-15)], duration=1.0))
    assert found.force is not None
    assert [one.value for one in found.force] == pytest.approx([-2.0, 0.0])


FACTORS = st.floats(-900.0, 900.0)
SPEEDS = st.floats(1.0, 900.0).flatmap(lambda speed: st.sampled_from([speed, -speed]))
PIECES = st.lists(
    st.tuples(FACTORS, SPEEDS, FACTORS, FACTORS, FACTORS, FACTORS), min_size=1, max_size=3
)
"""Pieces that begin in motion: a start as slow as the fifth power of time looks like standstill."""


@given(pieces=PIECES, duration=st.floats(0.05, 2.0), up=st.sampled_from(["+x", "-x"]))
@settings(max_examples=100)
def test_extremes_and_means_of_any_polynomials_are_those_of_samples(
    pieces: list[tuple[float, ...]], duration: float, up: str
) -> None:
    """Turning round, driving and driven, as often as a piece may."""
    motion = played(machine(LOSSY, up=up), *pieces, duration=duration)
    count = 10_000
    times = (np.arange(len(pieces) * count) + 0.5) * duration / count
    sampled = pp.torques(motion, times)["x"]
    expected = math.sqrt(float((sampled**2).mean()))
    assert_allclose(load(motion).rms_torque or 0.0, expected, rtol=1e-3)
    # It stands before and after the step.
    sampled = np.append(sampled, pp.torques(motion, [motion.duration])["x"])
    low, high = torques(motion)
    spread = float(np.ptp(sampled))
    assert low <= sampled.min() + 1e-9
    assert high >= sampled.max() - 1e-9
    assert_allclose([low, high], [sampled.min(), sampled.max()], atol=2e-3 * spread + 1e-9)


def test_a_schedule_that_takes_no_time_has_the_load_of_standstill() -> None:
    """Nothing is divided by its duration; both ends of the rest and what hangs then count alike."""
    own = machine(pp.Mechanics(mass=10.0, lead=20.0), up="+x")
    planned = plan(own, pp.Wait(1.0), pp.Payload(2.0))
    rest = pp.Trajectory.rest(("x",), np.zeros(1))
    held = replace(planned, steps=tuple(replace(one, trajectory=rest) for one in planned.steps))
    found = load(held)
    assert found.force is not None
    assert_allclose([one.value for one in found.force], [10.0 * G, 12.0 * G], rtol=EXACT)
    mean = math.sqrt((10.0**2 + 10.0**2 + 12.0**2) / 3) * G
    assert_allclose(found.rms_force or 0.0, mean, rtol=EXACT)
    assert_allclose(pp.forces(held, [0.0, 1.0])["x"], 12.0 * G, rtol=EXACT)


# --- properties

LAWS = st.sampled_from(["trapezoidal", "quintic"])
JERKS = st.sampled_from([None, 2e4, 3e5])
WAYS = st.floats(1.0, 900.0).flatmap(lambda way: st.sampled_from([way, -way]))


def lifted(
    mechanics: pp.Mechanics, way: float, *, law: LawName, jerk: float | None, up: str | None
) -> pp.Plan:
    """Plan a move and a rest."""
    own = machine(mechanics, up=up, velocity=700.0, acceleration=4000.0, deceleration=3000.0)
    axes = (replace(own.axes[0], jerk=jerk),)
    return plan(replace(own, axes=axes), pp.Move({"x": way}, law=law), pp.Wait(0.05))


@given(way=WAYS, law=LAWS, jerk=JERKS, up=st.sampled_from([None, "+x", "-x"]))
@settings(max_examples=40)
def test_the_work_done_is_friction_and_height(
    way: float, law: LawName, jerk: float | None, up: str | None
) -> None:
    """From rest to rest the energy of motion is what it was: the inertia has cost nothing."""
    friction = 0.0 if up else 0.02
    mechanics = pp.Mechanics(mass=21.0, drag=17.0, friction=friction)
    motion = lifted(mechanics, way, law=law, jerk=jerk, up=up)
    points, weights = np.polynomial.legendre.leggauss(6)
    work = 0.0
    breaks = motion.trajectory.breaks
    for begin, end in pairwise(breaks.tolist()):
        times = 0.5 * (begin + end) + 0.5 * (end - begin) * points
        power = pp.forces(motion, times)["x"] * motion.trajectory.at(times, 1)[:, 0] / 1000
        work += 0.5 * (end - begin) * float(power @ weights)
    height = {"+x": way, "-x": -way, None: 0.0}[up] / 1000
    rubbed = (17.0 + friction * 21.0 * G) * abs(way) / 1000
    assert_allclose(work, rubbed + 21.0 * G * height, rtol=1e-8, atol=1e-9)


@given(way=WAYS, law=LAWS, jerk=JERKS)
@settings(max_examples=30)
def test_mirrored_moves_mirror_torques(way: float, law: LawName, jerk: float | None) -> None:
    """Without weight there and back are the same."""
    mechanics = replace(LOSSY, counterbalance=0.0, friction=0.01)
    there, back = (
        lifted(mechanics, sign * way, law=law, jerk=jerk, up=None) for sign in (1.0, -1.0)
    )
    low, high = torques(there)
    assert_allclose(torques(back), (-high, -low), rtol=EXACT)
    assert_allclose(load(back).rms_torque or 0.0, load(there).rms_torque or 0.0, rtol=EXACT)


@given(way=WAYS, law=LAWS, jerk=JERKS, slower=st.floats(1.1, 8.0))
@settings(max_examples=30)
def test_slowing_down_spares_inertia_by_the_square_and_weight_not_at_all(
    way: float, law: LawName, jerk: float | None, slower: float
) -> None:
    """In c times the time the torque of inertia falls by c², and that of weight stays.

    Source: Hollerbach: Dynamic Scaling of Manipulator Trajectories (1984); from memory.
    """
    mechanics = pp.Mechanics(mass=13.0, lead=25.0, inertia=1.6e-4)
    fast = lifted(mechanics, way, law=law, jerk=jerk, up="+x")
    steps = tuple(
        ScheduledStep(
            step.name,
            step.kind,
            step.start * slower,
            step.trajectory.stretched(step.duration * slower),
        )
        for step in fast.steps
    )
    slow = Schedule(fast.job, steps, ())
    weight = 13.0 * G * 0.025 / (2 * math.pi)
    before, after = np.array(torques(fast)) - weight, np.array(torques(slow)) - weight
    assert_allclose(after, before / slower**2, rtol=1e-7, atol=1e-12)


def test_a_payload_weighs_on_the_up_axis_and_only_while_it_hangs() -> None:
    """From its step on, to the step that puts it down."""
    own = machine(pp.Mechanics(mass=10.0), up="+x")
    steps = (pp.Wait(1.0), pp.Payload(3.0), pp.Wait(1.0), pp.Payload(), pp.Wait(1.0))
    held = plan(own, *steps)
    expected = np.array([10.0, 13.0, 13.0, 10.0, 10.0]) * G
    assert_allclose(pp.forces(held, [0.5, 1.0, 1.5, 2.0, 9.0])["x"], expected, rtol=EXACT)
    # What is put down when all is over is gone in the last row, which stands at the end.
    table = pp.sample(plan(own, *steps[:4]), period=0.5, columns=("force",))
    assert_allclose(table.force["x"], expected[[0, 0, 1, 2, 3]], rtol=EXACT)


def test_a_payload_that_hangs_when_all_is_over_is_borne() -> None:
    """A table's last row has it, so it is judged too; but it takes no time of the cycle."""
    own = machine(pp.Mechanics(mass=10.0), up="+x")
    held = load(plan(own, pp.Wait(1.0), pp.Payload(3.0)))
    assert held.peak_force is not None
    assert held.rms_force is not None
    assert_allclose(held.peak_force.value, 13.0 * G, rtol=EXACT)
    assert (held.peak_force.time, held.peak_force.step) == (1.0, "payload 2")
    assert_allclose(held.rms_force, 10.0 * G, rtol=EXACT)


def test_a_payload_presses_on_the_guides() -> None:
    """Friction is a share of all the weight that is borne."""
    own = machine(pp.Mechanics(mass=10.0, friction=0.1), velocity=100.0, acceleration=1000.0)
    moved = plan(own, pp.Payload(5.0), pp.Move({"x": 500.0}))
    assert_allclose(pp.forces(moved, [moved.duration / 2])["x"], 1.5 * G, rtol=EXACT)


def test_a_tile_that_a_gripper_turns_has_the_inertia_of_a_plate() -> None:
    """About its middle m (a² + b²) / 12, beside it more by Steiner's theorem; textbook results."""
    tile = np.array([[-300.0, -150.0], [300.0, -150.0], [300.0, 150.0], [-300.0, 150.0]])
    axis = pp.Axis(
        "c",
        kind="rotary",
        travel=(-360.0, 360.0),
        velocity=FAST,
        acceleration=1000.0,
        mechanics=pp.Mechanics(load_inertia=0.2),
    )
    about_its_middle = 4.1 * (0.6**2 + 0.3**2) / 12
    for beside, extra in (((0.0, 0.0), 0.0), ((80.0, -60.0), 4.1 * 0.1**2)):
        outline = tuple((float(x), float(y)) for x, y in tile + beside)
        cycle = pp.Cycle(
            steps=(pp.Payload(4.1, outline=outline), pp.Move({"c": 90.0})), start={"c": 0.0}
        )
        found = torques(pp.plan(pp.Machine("turner", (axis,)), cycle))[1] / math.radians(1000.0)
        assert_allclose(found, 0.2 + about_its_middle + extra, rtol=EXACT)


def test_an_axis_that_moves_a_table_does_not_feel_the_payload() -> None:
    """What hangs at the tool does not lie on the table below it."""
    steps = (pp.Payload(5.0), pp.Move({"x": 100.0}))
    for carries, mass in ((True, 15.0), (False, 10.0)):
        own = machine(pp.Mechanics(mass=10.0, carries_payload=carries), acceleration=2000.0)
        peak = load(plan(own, *steps)).peak_force
        assert peak is not None
        assert_allclose(abs(peak.value), mass * 2.0, rtol=EXACT)


def test_lead_and_gear_are_those_of_the_drive_unless_given() -> None:
    """What counts positions is the transmission too."""
    drive = Drive(10000, lead=20.0, gear=(3, 1))
    axis = pp.Axis("x", travel=(0.0, 1.0), velocity=1.0, acceleration=1.0, drive=drive)
    turns = [
        replace(axis, mechanics=mechanics).motor_turn
        for mechanics in (
            pp.Mechanics(mass=1.0),
            pp.Mechanics(mass=1.0, lead=30.0),
            pp.Mechanics(mass=1.0, gear=(2, 1)),
        )
    ]
    assert turns == [20.0 / 3, 10.0, 10.0]
    turning = replace(axis, kind="rotary", drive=None, mechanics=pp.Mechanics(load_inertia=1.0))
    assert turning.motor_turn == 360.0


# --- motors are judged


def motor_findings(motor: pp.Motor) -> dict[str, pp.Finding]:
    """Return what is found of a motor on the bobbing axis."""
    axes = (replace(LIFT.axes[0], motor=motor),)
    job = replace(BOBBING.job, machine=replace(LIFT, axes=axes))
    found = pp.check(replace(BOBBING, job=job))
    names = ("peak torque", "rms torque", "motor speed")
    return {finding.check: finding for finding in found if finding.check in names}


@pytest.mark.parametrize(("share", "met"), [(1 + 1e-6, True), (1 - 1e-6, False)])
def test_a_motor_is_judged_by_peak_mean_and_speed(share: float, *, met: bool) -> None:
    """A motor just large enough passes, one a hair smaller does not."""
    own = load(BOBBING)
    assert own.peak_torque is not None
    assert own.speed is not None
    needed = (own.rms_torque or 0.0, abs(own.peak_torque.value), own.speed.value)
    rated, peak, speed = (value * share for value in needed)
    found = motor_findings(pp.Motor(rated_torque=rated, peak_torque=peak, speed=speed))
    assert {name: (finding.ok, finding.unit) for name, finding in found.items()} == {
        "peak torque": (met, "N·m"),
        "rms torque": (met, "N·m"),
        "motor speed": (met, "1/min"),
    }
    assert_allclose([finding.use or 0.0 for finding in found.values()], 1 / share)
    assert found["peak torque"].step == own.peak_torque.step


def test_only_what_a_motor_says_is_judged() -> None:
    """A requirement that nobody has made cannot be broken."""
    assert set(motor_findings(pp.Motor(speed=100.0))) == {"motor speed"}
    assert not [f for f in pp.check(BOBBING) if "torque" in f.check]


def test_findings_of_motors_are_in_the_summary() -> None:
    """Scripts read them as they read all others."""
    axes = (replace(LIFT.axes[0], motor=pp.Motor(peak_torque=0.1)),)
    planned = plan(replace(LIFT, axes=axes), pp.Move({"x": 300.0}))
    summary = pp.summarise(planned)
    assert not summary["requirements_met"]
    checks = summary["checks"]
    assert isinstance(checks, list)
    (found,) = [check for check in checks if check["check"] == "peak torque"]
    assert (found["axis"], found["unit"], found["ok"]) == ("x", "N·m", False)


# --- what a file says

FILE = """\
up = "+z"
[axes.x]
travel = [0, 1000]
velocity = 500
acceleration = 2000
[axes.x.mechanics]
mass = "85000 g"
friction = 0.01
drag = "0.04 kN"
damping = 15
lead = "2 dm"
gear = [5, 1]
inertia = "6.5 kg·cm²"
efficiency = 0.94
drag_torque = "100 mN·m"
[axes.x.motor]
rated_torque = "320 N·cm"
peak_torque = 9.5
speed = "75 rev/s"
[axes.z]
travel = [0, 100]
velocity = 500
acceleration = 2000
[axes.z.mechanics]
mass = 13
counterbalance = 60
carries_payload = false
[axes.c]
kind = "rotary"
travel = [0, 100]
velocity = 500
acceleration = 2000
[axes.c.mechanics]
load_inertia = "120 kg cm2"
drag = 2
""".replace("2 dm", "20 cm").replace("kg cm2", "kg*cm^2")


def written(folder: Path, text: str) -> Path:
    """Return a machine file."""
    file = folder / "machine.toml"
    file.write_text(text, encoding="utf-8")
    return file


def test_mechanics_and_motors_are_read_with_their_units(tmp_path: Path) -> None:
    """As data sheets print them."""
    x, z, c = pp.read_machine(written(tmp_path, FILE)).axes
    assert x.mechanics == pp.Mechanics(
        mass=85.0,
        friction=0.01,
        drag=40.0,
        damping=15.0,
        lead=200.0,
        gear=(5, 1),
        inertia=6.5e-4,
        efficiency=0.94,
        drag_torque=0.1,
    )
    assert x.motor == pp.Motor(rated_torque=3.2, peak_torque=9.5, speed=4500.0)
    assert z.mechanics == pp.Mechanics(mass=13.0, counterbalance=60.0, carries_payload=False)
    assert c.mechanics == pp.Mechanics(load_inertia=0.012, drag=2.0)


FAULTS = [
    ('mass = "85000 g"', "mass = -1", "axes.x.mechanics.mass", "-1 kg; allowed"),
    ('mass = "85000 g"\n', "", "axes.x.mechanics.mass", "missing; a mass in kg is needed"),
    ('mass = "85000 g"', 'mass = "5 N"', "axes.x.mechanics.mass", '"N" is no unit of it'),
    ("friction = 0.01", "friction = 1.5", "axes.x.mechanics.friction", "0 to 1"),
    ("friction = 0.01", 'friction = "1 %"', "axes.x.mechanics.friction", "without a unit"),
    ("friction = 0.01", "fricton = 0.01", "axes.x.mechanics.fricton", 'did you mean "friction"'),
    ('drag = "0.04 kN"', 'drag = "2 Nm"', "axes.x.mechanics.drag", "a force is needed"),
    ("damping = 15", "damping = nan", "axes.x.mechanics.damping", "nan"),
    ("efficiency = 0.94", "efficiency = 94", "axes.x.mechanics.efficiency", "94 of the power"),
    ("efficiency = 0.94", "efficiency = 0", "axes.x.mechanics.efficiency", "from 0.01 to 1"),
    ("gear = [5, 1]", "gear = [5]", "axes.x.mechanics.gear", "[turns of motor, turns of output]"),
    ("gear = [5, 1]", "gear = [5, 0]", "axes.x.mechanics.gear[2]", "0; allowed"),
    ('lead = "20 cm"', "lead = 0", "axes.x.mechanics.lead", "0 mm or deg; allowed: above 0"),
    ('lead = "20 cm"\n', "", "axes.x.mechanics.lead", "needed for the torque of the motor"),
    ("mass = 13", "mass = 13\nfriction = 0.1", "axes.z.mechanics.friction", "bear no weight"),
    ("damping = 15", "counterbalance = 1", "axes.x.mechanics.counterbalance", "only on the up"),
    ("carries_payload = false", "carries_payload = 0", "axes.z.mechanics.carries_payload", "0;"),
    ("load_inertia", "mass = 1\nload_inertia", "axes.c.mechanics.mass", "unknown key"),
    ("load_inertia", "inertia", "axes.c.mechanics.load_inertia", "missing; a moment of inertia"),
    ("peak_torque = 9.5", "peak_torque = 1", "axes.x.motor.rated_torque", "above the peak torque"),
    ("peak_torque = 9.5", "peak_torque = 0", "axes.x.motor.peak_torque", "above 0"),
    ('speed = "75 rev/s"', 'speed = "5 m/s"', "axes.x.motor.speed", "a speed of turning is needed"),
    ("[axes.c.mechanics]", "[axes.c.motor]\n[axes.c.mechanics]", "axes.c.motor", "says nothing"),
    ("[axes.z.mechanics]", "[axes.z.motor]", "axes.z.motor", "not known without mechanics"),
    ('up = "+z"', 'up = "+z"\nsetpoints.columns = ["tork"]', "setpoints.columns[1]", "torque"),
]


@pytest.mark.parametrize(("old", "new", "place", "words"), FAULTS)
def test_faults_are_told_at_their_place(
    tmp_path: Path, old: str, new: str, place: str, words: str
) -> None:
    """What is wrong, where, and what is allowed."""
    assert old in FILE
    text = FILE.replace(old, new, 1)
    if "[axes.z.motor]" in new:
        text = text.replace("mass = 13\ncounterbalance = 60\ncarries_payload = false", "speed = 1")
    with pytest.raises(pp.InputError) as caught:
        pp.read_machine(written(tmp_path, text))
    found = {fault.place: fault.message for fault in caught.value.faults}
    assert set(found) == {place}
    assert words in found[place]


def test_all_faults_of_mechanics_come_at_once(tmp_path: Path) -> None:
    """One run of the program, one list to work off."""
    text = FILE.replace("0.94", "2").replace("mass = 13", "mass = -3").replace("320 N·cm", "3 N")
    with pytest.raises(pp.InputError) as caught:
        pp.read_machine(written(tmp_path, text))
    assert [fault.place for fault in caught.value.faults] == [
        "axes.x.mechanics.efficiency",
        "axes.x.motor.rated_torque",
        "axes.z.mechanics.mass",
    ]


def test_records_built_in_code_are_judged_by_the_kind_of_the_axis() -> None:
    """A library user gets the messages that a file would get."""
    axis = pp.Axis("x", travel=(0.0, 1.0), velocity=1.0, acceleration=1.0)
    cases = (
        (pp.Mechanics, "neither of them"),
        (lambda: pp.Mechanics(mass=1.0, load_inertia=1.0), "mass and load_inertia"),
        (lambda: replace(axis, mechanics=pp.Mechanics(load_inertia=1.0)), "not on a linear axis"),
        (
            lambda: replace(axis, kind="rotary", mechanics=pp.Mechanics(mass=1.0)),
            "not on a rotary axis",
        ),
        (lambda: replace(axis, motor=pp.Motor(speed=1.0)), "without mechanics"),
    )
    for act, words in cases:
        with pytest.raises(pp.InputError, match=words):
            act()


# --- columns of tables

PORTAL = pp.Machine(
    "portal",
    (
        pp.Axis(
            "x",
            travel=(0.0, 800.0),
            velocity=500.0,
            acceleration=3000.0,
            mechanics=pp.Mechanics(mass=40.0, drag=12.0, lead=100.0, gear=(3, 1)),
            drive=Drive(10000, lead=100.0, direction=-1, also=Twin("x2")),
        ),
        pp.Axis("y", travel=(0.0, 800.0), velocity=500.0, acceleration=3000.0),
        pp.Axis(
            "c",
            kind="rotary",
            travel=(-180.0, 180.0),
            velocity=300.0,
            acceleration=3000.0,
            mechanics=pp.Mechanics(load_inertia=0.01, gear=(10, 1)),
        ),
    ),
)

TURNED = pp.plan(
    PORTAL,
    pp.Cycle(
        steps=(pp.Move({"x": 300.0, "y": 200.0, "c": 90.0}), pp.Wait(0.02)),
        start={"x": 0.0, "y": 0.0, "c": 0.0},
    ),
)

BOTH = Content(("pos", "force", "torque"))


def csv_columns(file: Path) -> dict[str, list[str]]:
    """Return the columns of a table by their headings."""
    with file.open(encoding="utf-8", newline="") as stream:
        heads, *rows = csv.reader(stream)
    return dict(zip(heads, map(list, zip(*rows, strict=True)), strict=True))


def test_columns_are_written_of_the_axes_that_have_them(tmp_path: Path) -> None:
    """Of an axis without mechanics nothing is known; a rotary one has a torque only."""
    file = tmp_path / "table.csv"
    pp.write_csv(TURNED, file, columns=BOTH.columns)
    found = csv_columns(file)
    assert list(found) == [
        *("t_s", "x_pos_mm", "x_force_N", "x_torque_Nm"),
        *("y_pos_mm", "c_pos_deg", "c_torque_Nm"),
    ]
    times = [float(cell) for cell in found["t_s"]]
    for heading, values, decimals in (
        ("x_force_N", pp.forces(TURNED, times)["x"], 2),
        ("x_torque_Nm", pp.torques(TURNED, times)["x"], 4),
        ("c_torque_Nm", pp.torques(TURNED, times)["c"], 4),
    ):
        assert {len(cell.partition(".")[2]) for cell in found[heading]} == {decimals}
        read = [float(cell) for cell in found[heading]]
        assert_allclose(read, values, rtol=0, atol=0.5001 * 10.0**-decimals)


def test_a_force_jumps_in_the_row_in_which_the_acceleration_jumps() -> None:
    """The piece that begins at an instant counts, for both."""
    table = pp.sample(TURNED, period=0.001, columns=("acc", "force"))
    assert table.acceleration is not None
    assert table.velocity is None
    acceleration, force = table.acceleration[:, 0], table.force["x"]
    moving = slice(1, int(TURNED.steps[0].duration * 1000) - 1)
    assert_allclose(force[moving], 40.0 * acceleration[moving] / 1000 + 12.0, rtol=EXACT)
    assert (acceleration[-1], force[-1]) == (0.0, 0.0)


def test_forces_are_the_same_in_every_format(tmp_path: Path) -> None:
    """A format changes how a number is stored, not which."""
    setpoints.write_json_lines(TURNED, tmp_path / "t.jsonl", content=BOTH)
    lines = (tmp_path / "t.jsonl").read_text(encoding="utf-8").splitlines()
    setpoints.write_npy(TURNED, tmp_path / "t.npy", content=BOTH)
    stored = np.load(tmp_path / "t.npy")
    table = pp.sample(TURNED, columns=BOTH.columns)
    assert_allclose(stored["x_force_N"], table.force["x"], rtol=1e-15)
    assert_allclose(stored["c_torque_Nm"], table.torque["c"], rtol=1e-15)
    assert_allclose([json.loads(line)["x_force_N"] for line in lines], table.force["x"], atol=0.005)


def test_two_drives_in_increments_share_one_force(tmp_path: Path) -> None:
    """It is the axis's, in newtons and in the axis's own direction."""
    content = Content.of(PORTAL, columns=BOTH.columns, units="increments")
    file = tmp_path / "table.csv"
    setpoints.write_table(TURNED, file, content=content)
    found = csv_columns(file)
    assert list(found) == [
        *("t_s", "x_pos_inc", "x_force_N", "x_torque_Nm", "x2_pos_inc"),
        *("y_pos_mm", "c_pos_deg", "c_torque_Nm"),
    ]
    assert float(found["x_force_N"][5]) == pytest.approx(132.0)
    assert int(found["x_pos_inc"][-1]) == -30000


def test_digits_and_names_of_loads_can_be_chosen(tmp_path: Path) -> None:
    """As for every other column."""
    dialect = setpoints.Dialect(decimals={"force": 0}, names={"x_force_N": "FX"})
    file = tmp_path / "table.csv"
    setpoints.write_table(TURNED, file, content=Content(("force",)), dialect=dialect)
    found = csv_columns(file)
    assert list(found) == ["t_s", "FX"]
    assert found["FX"][5] == "132"


@pytest.mark.parametrize(
    ("mechanics", "column", "words"),
    [
        (None, "force", r"no axis has mechanics: give \[axes.x.mechanics\]"),
        (None, "torque", r"give \[axes.x.mechanics\] with its lead"),
        (pp.Mechanics(mass=1.0), "torque", "the mechanics of x have no lead: give lead"),
    ],
)
def test_loads_of_which_nothing_is_known_are_refused(
    mechanics: pp.Mechanics | None, column: str, words: str
) -> None:
    """A column of zeros would be taken for a result; the message says what to add."""
    axis = pp.Axis("x", travel=(0.0, 9.0), velocity=1.0, acceleration=1.0, mechanics=mechanics)
    bare = pp.Machine("bare", (axis,))
    still = plan(bare, pp.Wait(0.1))
    with pytest.raises(pp.InputError, match=words):
        Content.of(bare, columns=("pos", column))
    with pytest.raises(pp.InputError, match=words):
        pp.sample(still, columns=("pos", column))
    with pytest.raises(pp.InputError, match=words):
        replace(bare, setpoints=pp.SetpointSettings(columns=("pos", column)))


def test_planning_without_mechanics_does_not_load_dynamics() -> None:
    """What is not asked for costs no start-up; and what is asked for loads no scipy."""
    code = """
import sys, profileplan as pp
axis = dict(travel=(0.0, 9.0), velocity=1.0, acceleration=1.0)
cycle = pp.Cycle(steps=(pp.Move({"x": 5.0}),), start={"x": 0.0})
plan = pp.plan(pp.Machine("m", (pp.Axis("x", **axis),)), cycle)
plan.check()
print("profileplan.dynamics" in sys.modules)
mechanics = pp.Mechanics(mass=1.0, lead=1.0)
heavy = pp.Axis("x", mechanics=mechanics, motor=pp.Motor(speed=1e3), **axis)
pp.plan(pp.Machine("m", (heavy,)), cycle).check()
print("profileplan.dynamics" in sys.modules, "scipy" in sys.modules)
"""
    result = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    assert result.stdout.split() == ["False", "True", "False"]
