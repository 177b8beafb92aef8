"""Several axes together: each by its own law to one arrival, or along straight lines."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from profileplan.inputs import LAW_NAMES
from profileplan.motion.laws import LAWS, Limits
from profileplan.motion.synchronisation import (
    line_durations,
    line_limits,
    lines,
    move,
    move_duration,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from conftest import Row
    from profileplan.inputs import LawName
    from profileplan.motion.polynomials import Array
    from profileplan.motion.trajectory import Trajectory

LIMIT_TOLERANCE = 1e-12
"""Share by which rounding may pass a limit: a thousandth of what the checks allow."""

TIME_TOLERANCE = 1e-13
"""Relative: rounding of a sum of durations."""

CHORD_TOLERANCE = 1e-12
"""Distance from a straight line, as a share of the largest coordinate."""

LAWS_BY_NAME = pytest.mark.parametrize("law", LAW_NAMES)


def decades(low: float, high: float) -> st.SearchStrategy[float]:
    """Draw numbers that are as likely in one decade as in another."""
    return st.floats(low, high).map(lambda exponent: 10.0**exponent)


class Axis(NamedTuple):
    """Where an axis starts, how far it goes, and its limits."""

    start: float
    distance: float
    limits: Limits


AXES = st.lists(
    st.builds(
        lambda start, distance, velocity, acceleration, brakes, rise: Axis(
            start,
            distance,
            Limits(velocity, acceleration, acceleration * brakes, acceleration * rise),
        ),
        st.floats(-1000, 1000).map(lambda position: round(position, 3)),
        st.one_of(
            st.just(0.0),
            st.builds(lambda size, sign: sign * size, decades(-6, 4), st.sampled_from([-1, 1])),
        ),
        decades(0, 4),
        decades(1, 5),
        decades(-1, 1),
        st.one_of(st.just(np.inf), decades(0, 3)),
    ),
    min_size=1,
    max_size=4,
)
"""One to four axes, unlike by decades; some do not move, some have no jerk limit."""


class Case(NamedTuple):
    """A move of several axes as arrays."""

    axes: tuple[str, ...]
    start: Array
    end: Array
    limits: Limits

    @classmethod
    def of(cls, axes: Sequence[Axis]) -> Case:
        """Gather drawn axes."""
        start = np.array([axis.start for axis in axes])
        end = start + np.array([axis.distance for axis in axes])
        limits = Limits(*np.array([axis.limits for axis in axes]).T)
        return cls(tuple("xyzw"[: len(axes)]), start, end, limits)

    @property
    def distance(self) -> Array:
        """How far each axis goes, as rounded by the positions."""
        return self.end - self.start

    def least(self, law: LawName) -> float:
        """Return the time of the slowest axis."""
        return float(move_duration(self.distance, self.limits, LAWS[law]))

    def run(self, law: LawName, duration: float | None) -> Trajectory:
        """Return the motion of all axes."""
        ends = (self.start, self.end)
        return move(self.axes, ends, self.limits, law=LAWS[law], duration=duration)

    def alone(self, law: LawName, axis: int, duration: float | None = None) -> Trajectory:
        """Return the motion of one axis as if there were no other."""
        only = slice(axis, axis + 1)
        limits = Limits(*(np.asarray(limit)[only] for limit in self.limits))
        return move(
            self.axes[only],
            (self.start[only], self.end[only]),
            limits,
            law=LAWS[law],
            duration=duration,
        )


def assert_within(motion: Trajectory, limits: Limits) -> None:
    """Compare the exact peaks of every axis with its limits."""
    for name, peak, limit in zip(Limits._fields, motion.peaks, limits, strict=True):
        allowed = np.asarray(limit) * (1 + LIMIT_TOLERANCE)
        assert np.all(peak.value <= allowed), f"{name}: {peak.value} beyond {limit}"


def times_of(motion: Trajectory) -> Array:
    """Return times over and around a motion."""
    return np.linspace(-0.1, 1.1, 61) * max(motion.duration, 1e-3)


# From point to point.


@pytest.mark.published("uniform-acceleration.toml", "two_joints")
def test_the_slower_joint_sets_the_time(row: Row) -> None:
    """Both arrive when the one with the longer way would alone."""
    end = np.array([row.given["first"], row.given["second"]])
    velocity, acceleration = (np.full(2, row.given[name]) for name in ("velocity", "acceleration"))
    limits = Limits(velocity, acceleration, acceleration, np.full(2, np.inf))
    law = LAWS["trapezoidal"]
    duration = float(move_duration(end, limits, law))
    row.assert_printed(duration=duration)
    motion = move(("a", "b"), (np.zeros(2), end), limits, law=law, duration=duration)
    assert_allclose(motion.duration, duration, rtol=TIME_TOLERANCE)
    # The same law at two scales: equal shares of the way at every time.
    shares = motion.at(times_of(motion)) / end
    assert_allclose(shares[:, 0], shares[:, 1], rtol=0, atol=1e-12)


@LAWS_BY_NAME
@given(drawn=AXES, factor=st.one_of(st.just(1.0), st.floats(1, 100)))
def test_all_axes_take_the_time_of_the_slowest(
    law: LawName, drawn: list[Axis], factor: float
) -> None:
    """Every axis that moves is under way until the common end, and none passes a limit."""
    case = Case.of(drawn)
    slowest = max(case.alone(law, axis).duration for axis in range(len(drawn)))
    assert_allclose(case.least(law), slowest, rtol=TIME_TOLERANCE)
    duration = case.least(law) * factor
    motion = case.run(law, duration)
    assert_allclose(motion.duration, duration, rtol=TIME_TOLERANCE)
    assert_within(motion, case.limits)
    assert_allclose(motion.first, case.start, rtol=0, atol=0)
    size = np.abs(case.start) + np.abs(case.end)
    assert_allclose(motion.last, case.end, rtol=1e-13, atol=1e-13 * size.max())
    fastest = motion.peaks.velocity.value
    assert_allclose(motion.jumps(0).value, 0, atol=1e-13 * size.max())
    assert np.all(motion.jumps(1).value <= 1e-12 * fastest), "the velocity jumps"
    just_before = motion.at([motion.duration * (1 - 1e-3)], 1)[0]
    assert_array_equal(just_before != 0, case.distance != 0)


@LAWS_BY_NAME
@given(drawn=AXES)
def test_peaks_fall_by_the_powers_of_the_slowing(law: LawName, drawn: list[Axis]) -> None:
    """An axis with time to spare uses c, c² and c³ of what it would use alone."""
    case = Case.of(drawn)
    duration = case.least(law)
    motion = case.run(law, duration)
    for axis in range(len(drawn)):
        alone = case.alone(law, axis)
        c = alone.duration / duration if duration else 1.0
        for peak, own, power in zip(motion.peaks, alone.peaks, (1, 2, 2, 3), strict=True):
            assert_allclose(peak.value[axis], own.value[0] * c**power, rtol=LIMIT_TOLERANCE)


@LAWS_BY_NAME
@given(drawn=AXES)
def test_each_axis_may_arrive_as_early_as_it_can(law: LawName, drawn: list[Axis]) -> None:
    """Without a common time every axis moves as alone, then rests at its target."""
    case = Case.of(drawn)
    motion = case.run(law, None)
    assert_allclose(motion.duration, case.least(law), rtol=TIME_TOLERANCE)
    assert_within(motion, case.limits)
    for axis in range(len(drawn)):
        arrival = case.alone(law, axis).duration
        later = motion.at([arrival * (1 + 1e-9), motion.duration + 1.0])[:, axis]
        size = abs(case.start[axis]) + abs(case.end[axis])
        assert_allclose(later, case.end[axis], rtol=0, atol=1e-13 * size)


@LAWS_BY_NAME
@given(drawn=AXES, factor=st.one_of(st.none(), st.floats(1, 10)))
def test_axes_are_independent(law: LawName, drawn: list[Axis], factor: float | None) -> None:
    """Common practice, no source: the Jacobian of a Cartesian machine is the identity.

    So the joint motion is that of each axis, stretched to the common time, and nothing else.
    """
    case = Case.of(drawn)
    duration = None if factor is None else factor * case.least(law)
    motion = case.run(law, duration)
    times = times_of(motion)
    for axis in range(len(drawn)):
        alone = case.alone(law, axis, duration)
        expected = alone.at(times)[:, 0]
        size = abs(case.start[axis]) + abs(case.end[axis])
        assert_allclose(motion.at(times)[:, axis], expected, rtol=0, atol=1e-12 * size)


@LAWS_BY_NAME
@given(drawn=AXES, moved=st.integers(0, 3))
def test_moving_one_axis_never_moves_another(law: LawName, drawn: list[Axis], moved: int) -> None:
    """Common practice, no source: on a Cartesian machine every axis has its own direction."""
    still = [
        axis if index == moved % len(drawn) else axis._replace(distance=0.0)
        for index, axis in enumerate(drawn)
    ]
    case = Case.of(still)
    motion = case.run(law, case.least(law))
    others = np.arange(len(drawn)) != moved % len(drawn)
    low, high = motion.extremes(0)
    assert_array_equal(low.value[others], case.start[others])
    assert_array_equal(high.value[others], case.start[others])
    for peak in motion.peaks:
        assert_array_equal(peak.value[others], 0.0)


@LAWS_BY_NAME
@given(drawn=AXES, offset=st.integers(-1000, 1000))
def test_no_position_is_singular(law: LawName, drawn: list[Axis], offset: int) -> None:
    """Common practice, no source: a Cartesian machine moves alike wherever it stands."""
    # Distances in whole 1/1024 mm, so that the shift itself rounds nothing.
    exact = [
        axis._replace(
            start=round(axis.start * 1024) / 1024, distance=round(axis.distance * 1024) / 1024
        )
        for axis in drawn
    ]
    case = Case.of(exact)
    shifted = Case.of([axis._replace(start=axis.start + offset) for axis in exact])
    here, there = case.run(law, case.least(law)), shifted.run(law, case.least(law))
    assert case.least(law) == shifted.least(law)
    assert_array_equal(here.durations, there.durations)
    for derivative in (1, 2, 3):
        times = times_of(here)
        assert_array_equal(here.at(times, derivative), there.at(times, derivative))


@LAWS_BY_NAME
def test_a_time_too_short_for_the_slowest_is_refused(law: LawName) -> None:
    """However fast the other axes are."""
    case = Case.of(
        [
            Axis(0.0, 1.0, Limits(100.0, 1000.0, 1000.0, np.inf)),
            Axis(0.0, 100.0, Limits(50.0, 100.0, 200.0, 1000.0)),
        ]
    )
    with pytest.raises(ValueError, match="cannot be stretched"):
        case.run(law, 0.99 * case.least(law))


@LAWS_BY_NAME
def test_a_move_to_the_same_place_takes_no_time(law: LawName) -> None:
    """And with a time asked for it waits."""
    case = Case.of([Axis(5.0, 0.0, Limits(1.0, 1.0, 1.0, 1.0))] * 2)
    assert case.least(law) == 0
    for duration in (None, 0.0, 2.5):
        motion = case.run(law, duration)
        assert motion.duration == (duration or 0.0)
        assert_array_equal(motion.at([-1.0, 0.0, 1.0, 3.0]), np.full((4, 2), 5.0))


@LAWS_BY_NAME
def test_many_moves_are_timed_at_once(law: LawName) -> None:
    """The last axis of the array is the machine's axes; all before it are moves."""
    random = np.random.default_rng(3)
    distance = random.uniform(-100, 100, (4, 5, 3))
    limits = Limits(
        np.array([100.0, 200.0, 50.0]),
        np.array([1000.0, 500.0, 800.0]),
        np.array([900.0, 2000.0, 800.0]),
        np.array([1e4, np.inf, 2e4]),
    )
    durations = move_duration(distance, limits, LAWS[law])
    assert durations.shape == (4, 5)
    for index in np.ndindex(4, 5):
        assert durations[index] == move_duration(distance[index], limits, LAWS[law])


# Along straight lines.


class Path(NamedTuple):
    """Points to be joined by straight lines, and what bounds the motion."""

    points: Array
    limits: Limits
    linear: tuple[bool, ...]
    speed: Array

    @property
    def axes(self) -> tuple[str, ...]:
        """Names of the axes."""
        return tuple("xyzw"[: self.points.shape[1]])

    @property
    def distance(self) -> Array:
        """The lines, from point to point."""
        return np.diff(self.points, axis=0)

    @property
    def along(self) -> Limits:
        """What bounds the way along each line."""
        return line_limits(self.distance, self.limits, linear=self.linear, speed=self.speed)

    def only(self, line: int) -> Path:
        """Return one of the lines."""
        points, speed = self.points[line : line + 2], self.speed[line : line + 1]
        return self._replace(points=points, speed=speed)

    def durations(self, law: LawName) -> Array:
        """Return the least time of each line."""
        return line_durations(self.distance, self.along, LAWS[law])

    def run(self, law: LawName, *, slowing: float = 1.0, waits: Array | None = None) -> Trajectory:
        """Return the motion through the points."""
        return lines(
            self.axes,
            self.points,
            self.along,
            law=LAWS[law],
            durations=self.durations(law) * slowing,
            waits=waits,
        )


@st.composite
def paths(draw: st.DrawFn) -> Path:
    """Draw one to four lines of one to four axes; points may repeat, axes stand still."""
    drawn = draw(AXES)
    width = len(drawn)
    coordinates = st.one_of(
        st.integers(-3, 3).map(float), st.floats(-1000, 1000).map(lambda x: round(x, 3))
    )
    count = draw(st.integers(1, 4))
    points = draw(
        st.lists(
            st.lists(coordinates, min_size=width, max_size=width),
            min_size=count + 1,
            max_size=count + 1,
        )
    )
    speeds = st.one_of(st.just(np.inf), decades(-1, 4))
    return Path(
        np.array(points),
        Limits(*np.array([axis.limits for axis in drawn]).T),
        tuple(draw(st.lists(st.booleans(), min_size=width, max_size=width))),
        np.array(draw(st.lists(speeds, min_size=count, max_size=count))),
    )


@pytest.mark.published("pick-and-place.toml", "one_way")
def test_pick_and_place_corner_by_corner(row: Row) -> None:
    """Up, across and down with a stop at each corner; nothing is faster than across alone."""
    up, across = row.given["up"], row.given["across"]
    points = np.array([[0, 0], [0, up], [across, up], [across, 0]])
    kept = [row.given.get(name, np.inf) for name in ("velocity", "acceleration", "jerk")]
    limits = Limits(*(np.full(2, limit) for limit in (kept[0], kept[1], kept[1], kept[2])))
    path = Path(points, limits, (True, True), np.full(3, np.inf))
    alone = move_duration(points[-1] - points[0], limits, LAWS["trapezoidal"])
    row.assert_printed(duration=path.run("trapezoidal").duration, slowest_axis=alone)


@LAWS_BY_NAME
@given(path=paths(), slowing=st.one_of(st.just(1.0), st.floats(1, 10)))
def test_lines_keep_every_limit(law: LawName, path: Path, slowing: float) -> None:
    """Of each axis, and of the speed along the linear axes on every line."""
    motion = path.run(law, slowing=slowing)
    assert_within(motion, path.limits)
    durations = path.durations(law) * slowing
    assert_allclose(motion.duration, durations.sum(), rtol=TIME_TOLERANCE)
    for line, speed in enumerate(path.speed):
        fastest = path.only(line).run(law, slowing=slowing).speeds(path.linear).value.max()
        assert fastest <= speed * (1 + LIMIT_TOLERANCE), f"{fastest} beyond {speed} on line {line}"


@LAWS_BY_NAME
@given(path=paths(), slowing=st.one_of(st.just(1.0), st.floats(1, 10)))
def test_straight_lines_stay_straight(law: LawName, path: Path, slowing: float) -> None:
    """At every time the machine is on the line, between its ends, and never turns back."""
    motion = path.run(law, slowing=slowing)
    ends = np.concatenate([[0.0], np.cumsum(path.durations(law) * slowing)])
    size = np.abs(path.points).max(initial=1.0)
    for line, (start, end) in enumerate(zip(path.points[:-1], path.points[1:], strict=True)):
        times = np.linspace(ends[line], ends[line + 1], 21)
        positions = motion.at(times)
        length = np.linalg.norm(end - start)
        if length == 0:
            continue
        share = (positions - start) @ (end - start) / length**2
        off = np.linalg.norm(positions - start - share[:, np.newaxis] * (end - start), axis=-1)
        assert_allclose(off, 0, atol=CHORD_TOLERANCE * size, err_msg=f"line {line}")
        rounding = CHORD_TOLERANCE * size / length
        assert np.all(np.diff(share) >= -rounding), f"line {line} turns back"
        assert_allclose(share[[0, -1]], [0, 1], rtol=0, atol=max(rounding, 1e-9))


@LAWS_BY_NAME
@given(path=paths(), waits=st.lists(st.sampled_from([0.0, 0.1, 2.0]), min_size=5, max_size=5))
def test_the_motion_rests_at_every_point(law: LawName, path: Path, waits: list[float]) -> None:
    """Exact stops: the chain takes the sum of its lines and waits, and stands at each point."""
    pauses = np.array(waits[: len(path.points)])
    motion = path.run(law, waits=pauses)
    durations = path.durations(law)
    assert_allclose(motion.duration, durations.sum() + pauses.sum(), rtol=TIME_TOLERANCE)
    arrivals = np.cumsum(np.concatenate([[0.0], pauses[:-1] + durations]))
    size = np.abs(path.points).max(initial=1.0)
    for at in (arrivals, arrivals + 0.5 * pauses, arrivals + pauses):
        # A time that is off by rounding is off in place by the square of it.
        assert_allclose(motion.at(at), path.points, rtol=0, atol=1e-9 * size)
    resting = pauses > 0
    middles = (arrivals + 0.5 * pauses)[resting]
    assert_array_equal(motion.at(middles), path.points[resting])
    assert_array_equal(motion.at(middles, 1), 0.0 * path.points[resting])
    fastest = motion.peaks.velocity.value
    for time in arrivals:
        stopped = np.abs(motion.at([time - 1e-12, time, time + 1e-12], 1)).max(axis=0)
        assert np.all(stopped <= 1e-6 * fastest + 1e-9), f"{stopped} at {time} s"
    for derivative in (0, 1):
        peak = motion.extremes(derivative)
        reach = max(np.abs(extreme.value).max() for extreme in peak)
        assert_allclose(motion.jumps(derivative).value, 0, atol=1e-12 * reach)


@LAWS_BY_NAME
@given(path=paths())
def test_a_chain_takes_the_sum_of_its_lines(law: LawName, path: Path) -> None:
    """Each line of a chain is the line as it is planned alone."""
    total = 0.0
    for line in range(path.speed.size):
        total += path.only(line).run(law).duration
    assert_allclose(path.run(law).duration, total, rtol=TIME_TOLERANCE)


@LAWS_BY_NAME
@given(drawn=AXES)
def test_a_line_along_one_axis_is_that_axis_alone(law: LawName, drawn: list[Axis]) -> None:
    """Nothing is lost by going straight where there is only one way to go."""
    still = [drawn[0], *(axis._replace(distance=0.0) for axis in drawn[1:])]
    case = Case.of(still)
    linear = (True,) * len(still)
    path = Path(np.stack([case.start, case.end]), case.limits, linear, np.full(1, np.inf))
    motion, alone = path.run(law), case.run(law, case.least(law))
    assert_allclose(motion.duration, case.least(law), rtol=TIME_TOLERANCE)
    for peak, own in zip(motion.peaks, alone.peaks, strict=True):
        assert_allclose(peak.value, own.value, rtol=LIMIT_TOLERANCE)


@LAWS_BY_NAME
@given(drawn=AXES)
def test_a_line_is_never_faster_than_its_slowest_axis(law: LawName, drawn: list[Axis]) -> None:
    """Going straight is one more demand on the same axes."""
    case = Case.of(drawn)
    linear = (True,) * len(drawn)
    path = Path(np.stack([case.start, case.end]), case.limits, linear, np.full(1, np.inf))
    assert path.durations(law)[0] >= case.least(law) * (1 - TIME_TOLERANCE)


@pytest.mark.parametrize("axis", [0, 1, 2])
@pytest.mark.parametrize("name", Limits._fields)
def test_the_axis_that_binds_is_at_its_limit(name: str, axis: int) -> None:
    """Whichever quantity of whichever axis is scarce, it is used up and no other is passed."""
    distance = np.array([300.0, -400.0, 50.0])
    plenty = [np.full(3, limit) for limit in (1000.0, 5000.0, 6000.0, 1e5)]
    scarce = Limits._fields.index(name)
    plenty[scarce][axis] *= 0.01
    path = Path(
        np.stack([np.zeros(3), distance]), Limits(*plenty), (True, True, False), np.full(1, np.inf)
    )
    peaks = path.run("trapezoidal").peaks
    assert_allclose(peaks[scarce].value[axis], plenty[scarce][axis], rtol=1e-12)
    others = np.arange(3) != axis
    assert np.all(peaks[scarce].value[others] < plenty[scarce][others])
    assert_within(path.run("trapezoidal"), path.limits)


def test_speed_is_counted_along_the_linear_axes_only() -> None:
    """3-4-5: a speed of 100 mm/s leaves 60 and 80 mm/s; turning on the way costs nothing."""
    limits = Limits(*(np.full(3, limit) for limit in (1e3, 1e4, 1e4, 1e6)))
    points = np.array([[0.0, 0.0, 0.0], [300.0, 400.0, 180.0]])
    path = Path(points, limits, (True, True, False), np.array([100.0]))
    motion = path.run("trapezoidal")
    assert_allclose(motion.speeds([True, True, False]).value.max(), 100.0, rtol=1e-12)
    assert_allclose(motion.peaks.velocity.value, [60.0, 80.0, 36.0], rtol=1e-12)
    turning = Path(points * [0, 0, 1], limits, (True, True, False), np.array([1e-3]))
    free = turning._replace(speed=np.array([np.inf]))
    assert_array_equal(turning.durations("trapezoidal"), free.durations("trapezoidal"))


@LAWS_BY_NAME
def test_a_line_of_no_length_takes_no_time(law: LawName) -> None:
    """Alone, repeated, or between lines; asked for a time, it waits so long."""
    limits = Limits(*(np.full(2, limit) for limit in (100.0, 1000.0, 1000.0, np.inf)))
    point, other = np.array([3.0, 4.0]), np.array([13.0, 4.0])
    alone = Path(np.stack([point] * 3), limits, (True, True), np.array([50.0, np.inf]))
    assert_array_equal(alone.durations(law), [0.0, 0.0])
    assert alone.run(law).duration == 0
    assert_array_equal(alone.run(law).at([0.0]), [point])
    waiting = lines(
        alone.axes, alone.points, alone.along, law=LAWS[law], durations=np.array([1.5, 0.5])
    )
    assert waiting.duration == 2
    assert_array_equal(waiting.at([0.0, 1.0, 2.0]), np.stack([point] * 3))
    between = Path(np.stack([point, other, other, point]), limits, (True, True), np.full(3, np.inf))
    durations = between.durations(law)
    assert_array_equal(durations > 0, [True, False, True])
    assert_allclose(between.run(law).duration, durations.sum(), rtol=TIME_TOLERANCE)


@LAWS_BY_NAME
def test_a_point_alone_is_rested_at(law: LawName) -> None:
    """A path of one point has no line, and its wait is kept."""
    nothing = Limits(*[np.zeros(0)] * 4)
    for wait in (0.0, 0.7):
        motion = lines(
            ("x", "y"),
            np.array([[3.0, 4.0]]),
            nothing,
            law=LAWS[law],
            durations=np.zeros(0),
            waits=np.array([wait]),
        )
        assert motion.duration == wait
        assert_array_equal(motion.last, [3.0, 4.0])


@LAWS_BY_NAME
def test_a_line_in_too_short_a_time_is_refused(law: LawName) -> None:
    """One of several lines is enough."""
    limits = Limits(*(np.full(2, limit) for limit in (100.0, 1000.0, 1000.0, 1e4)))
    points = np.array([[0.0, 0.0], [10.0, 0.0], [10.0, 50.0]])
    path = Path(points, limits, (True, True), np.full(2, np.inf))
    durations = path.durations(law) * [1.0, 0.999]
    with pytest.raises(ValueError, match="cannot be stretched"):
        lines(path.axes, points, path.along, law=LAWS[law], durations=durations)
