"""Piecewise polynomial motion, against scipy's PPoly and against dense sampling of its pieces."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from numpy.testing import assert_allclose, assert_array_equal
from scipy.interpolate import PPoly

from profileplan.motion.trajectory import ORDER, Trajectory

if TYPE_CHECKING:
    from profileplan.motion.polynomials import Array

ROUNDING = 1e-12
"""Relative to the greatest value that the terms of the polynomials reach."""

SAMPLES = 400
"""Gaps between the samples of a piece."""

NUMBERS = st.one_of(
    st.integers(-2, 2).map(float), st.floats(-1, 1).map(lambda number: round(number, 9))
)


@st.composite
def trajectories(
    draw: st.DrawFn, *, pieces: int = 4, axes: int = 3, decades: float = 1.0
) -> Trajectory:
    """Draw a trajectory that jumps at its breaks; its pieces differ in length and degree."""
    count, width = draw(st.integers(1, pieces)), draw(st.integers(1, axes))
    exponents = st.floats(-decades, decades).map(lambda exponent: round(exponent, 3))
    durations = 10 ** np.array(draw(st.lists(exponents, min_size=count, max_size=count)))
    shape = (count, ORDER, width)
    unit = draw(arrays.arrays(np.float64, shape, elements=NUMBERS, fill=st.nothing()))
    for piece in range(count):
        unit[piece, draw(st.integers(1, ORDER)) :] = 0.0
    powers = durations[:, np.newaxis] ** np.arange(ORDER)
    return Trajectory(tuple("xyz"[:width]), durations, unit / powers[:, :, np.newaxis])


def ppoly(trajectory: Trajectory, axis: int) -> PPoly[np.float64]:
    """Return an axis as scipy's piecewise polynomial."""
    return PPoly(trajectory.coefficients[:, ::-1, axis].T, trajectory.breaks)


def sampled(trajectory: Trajectory, derivative: int) -> Array:
    """Return dense samples of every piece, both ends included: (n, d, samples)."""
    shares = np.linspace(0, 1, SAMPLES + 1)
    values = np.zeros((trajectory.durations.size, len(trajectory.axes), shares.size))
    for power in range(derivative, ORDER):
        factor = np.prod(np.arange(power - derivative + 1.0, power + 1.0))
        local = trajectory.durations[:, np.newaxis] * shares
        term = factor * local ** (power - derivative)
        values += trajectory.coefficients[:, power, :, np.newaxis] * term[:, np.newaxis, :]
    return values


def bound(trajectory: Trajectory, derivative: int) -> Array:
    """Return for every piece and axis what a derivative cannot exceed: (n, d)."""
    longest = Trajectory(
        trajectory.axes, trajectory.durations, np.abs(trajectory.coefficients)
    )  # all terms of one sign: greatest at the end
    return sampled(longest, derivative)[..., -1]


def gap(trajectory: Trajectory) -> Array:
    """Return the time between samples of every piece, for each axis alike: (n, 1) [s]."""
    return trajectory.durations[:, np.newaxis] / SAMPLES


def travel(duration: float = 2.0, distance: float = 8.0) -> Trajectory:
    """Return one axis that speeds up and slows down with one constant acceleration."""
    half, way = 0.5 * duration, 0.5 * distance
    acceleration = 2 * way / half**2
    coefficients = np.zeros((2, ORDER, 1))
    coefficients[0, 2] = 0.5 * acceleration
    coefficients[1, :3, 0] = way, acceleration * half, -0.5 * acceleration
    return Trajectory(("x",), np.array([half, half]), coefficients)


def renamed(trajectory: Trajectory, *axes: str) -> Trajectory:
    """Return the same motion of other axes."""
    return Trajectory(axes, trajectory.durations, trajectory.coefficients)


@given(trajectories(), st.lists(st.floats(0, 1), min_size=1, max_size=8))
def test_values_agree_with_scipy(trajectory: Trajectory, shares: list[float]) -> None:
    """Every derivative at any time inside, at a break that of the piece that begins there."""
    times = np.array(shares) * trajectory.duration
    times = np.concatenate([times[times < trajectory.duration], trajectory.breaks[:-1]])
    for derivative in range(ORDER + 1):
        size = bound(trajectory, derivative).max() if derivative < ORDER else 0.0
        for axis in range(len(trajectory.axes)):
            expected = ppoly(trajectory, axis).derivative(derivative)(times)
            actual = trajectory.at(times, derivative)[:, axis]
            assert_allclose(actual, expected, rtol=0, atol=ROUNDING * size)


@given(trajectories(pieces=1))
def test_the_velocity_adds_up_to_the_way(trajectory: Trajectory) -> None:
    """The integral that scipy takes of the velocity leads from the first position to the last."""
    for axis in range(len(trajectory.axes)):
        velocity = ppoly(trajectory, axis).derivative()
        way = velocity.integrate(0, trajectory.duration)
        size = bound(trajectory, 0).max()
        expected = trajectory.last[axis] - trajectory.first[axis]
        assert_allclose(way, expected, rtol=0, atol=ROUNDING * size)


@given(trajectories(), st.integers(0, 3))
def test_extremes_agree_with_the_roots_that_scipy_finds(
    trajectory: Trajectory, derivative: int
) -> None:
    """Extremes lie at ends of pieces or where the next derivative vanishes, and nowhere else."""
    low, high = trajectory.extremes(derivative)
    ends = sampled(trajectory, derivative)[..., [0, -1]]
    size = bound(trajectory, derivative).max()
    for axis in range(len(trajectory.axes)):
        curve = ppoly(trajectory, axis).derivative(derivative)
        turning = curve.derivative().roots(discontinuity=False, extrapolate=False)
        inner = curve(turning[~np.isnan(turning)])
        values = np.concatenate([ends[:, axis].ravel(), inner])
        found = [low.value[axis], high.value[axis]]
        assert_allclose(found, [values.min(), values.max()], rtol=0, atol=ROUNDING * size)


@given(trajectories(decades=3), st.integers(0, 3))
def test_no_sample_lies_beyond_the_extremes(trajectory: Trajectory, derivative: int) -> None:
    """Exact extremes enclose every sample, and some sample comes close to each."""
    low, high = trajectory.extremes(derivative)
    values = sampled(trajectory, derivative)
    size = bound(trajectory, derivative).max()
    greatest, least = values.max(axis=(0, 2)), values.min(axis=(0, 2))
    assert np.all(greatest <= high.value + ROUNDING * size), f"{greatest} beyond {high}"
    assert np.all(least >= low.value - ROUNDING * size), f"{least} beyond {low}"
    # Between samples a curve differs by an eighth of its curvature times the square of their gap.
    reach = (bound(trajectory, derivative + 2) * gap(trajectory) ** 2).max() / 8 + ROUNDING * size
    assert_allclose(high.value, greatest, rtol=0, atol=reach)
    assert_allclose(low.value, least, rtol=0, atol=reach)


@given(trajectories(decades=2))
def test_an_extreme_is_taken_at_its_time(trajectory: Trajectory) -> None:
    """The time of a peak is where the reader of a report will look."""
    for derivative in range(4):
        for extreme in trajectory.extremes(derivative):
            for axis, (value, time) in enumerate(zip(*extreme, strict=True)):
                assert_taken(trajectory, axis, derivative, value=value, time=time)


@given(trajectories(decades=2))
def test_a_peak_is_taken_at_its_time(trajectory: Trajectory) -> None:
    """The same for the magnitudes; an axis without a deceleration, say, has it nowhere."""
    for derivative, peak in zip((1, 2, 2, 3), trajectory.peaks, strict=True):
        for axis, (value, time) in enumerate(zip(*peak, strict=True)):
            if value > 0:
                assert_taken(trajectory, axis, derivative, value=value, time=time, sign=-1)


def assert_taken(
    trajectory: Trajectory, axis: int, derivative: int, *, value: float, time: float, sign: int = 1
) -> None:
    """Find a value, or with sign -1 its opposite, at a time; at a break on either side."""
    local = time - trajectory.breaks[:-1]
    near = (local >= -1e-9) & (local <= trajectory.durations + 1e-9)
    there = np.array(
        [
            np.polynomial.Polynomial(piece[:, axis]).deriv(derivative)(at)
            for piece, at in zip(trajectory.coefficients[near], local[near], strict=True)
        ]
    )
    slope = bound(trajectory, derivative + 1).max() * trajectory.duration
    atol = ROUNDING * (bound(trajectory, derivative).max() + slope)
    missed = np.minimum(np.abs(there - value), np.abs(there - sign * value)).min()
    assert_allclose(missed, 0, atol=atol, err_msg=f"axis {axis}, derivative {derivative}")


@given(trajectories(decades=2))
def test_accelerations_are_split_by_the_direction_of_motion(trajectory: Trajectory) -> None:
    """Along the velocity an acceleration counts as such, against it as deceleration."""
    velocity, acceleration = sampled(trajectory, 1), sampled(trajectory, 2)
    size = ROUNDING * bound(trajectory, 2).max()
    reach = bound(trajectory, 3)[..., np.newaxis] * gap(trajectory)[..., np.newaxis]
    near = bound(trajectory, 2)[..., np.newaxis] * gap(trajectory)[..., np.newaxis]
    moving = np.abs(velocity) > 1e-6 * np.abs(velocity).max(axis=(0, 2))[:, np.newaxis]
    for peak, sign in ((trajectory.peaks.acceleration, 1), (trajectory.peaks.deceleration, -1)):
        along = sign * velocity * acceleration
        surely = np.where(moving & (along > 0), np.abs(acceleration), 0.0).max(axis=(0, 2))
        assert np.all(surely <= peak.value + size), f"{surely} beyond {peak}"
        # Where the velocity changes sign between samples, either may be meant.
        perhaps = (along >= 0) | (np.abs(velocity) <= near)
        at_most = np.where(perhaps, np.abs(acceleration) + reach, 0.0).max(axis=(0, 2))
        assert np.all(peak.value <= at_most + size), f"{peak} beyond {at_most}"


def test_a_reversal_under_one_acceleration_counts_both_ways() -> None:
    """Thrown upward, an axis slows down and then speeds up, by the same acceleration."""
    coefficients = np.zeros((1, ORDER, 1))
    coefficients[0, 1:3, 0] = 10.0, -5.0
    peaks = Trajectory(("z",), np.array([3.0]), coefficients).peaks
    assert_allclose(peaks.velocity.value, [20.0], rtol=1e-15)
    assert_allclose(peaks.acceleration.value, [10.0], rtol=1e-15)
    assert_allclose(peaks.deceleration.value, [10.0], rtol=1e-15)
    assert_array_equal(peaks.jerk.value, [0.0])
    assert_allclose(peaks.acceleration.time, [1.0], rtol=1e-15)


@pytest.mark.parametrize("backward", [1e-9, 1e-12, 0.0])
def test_rounding_of_the_last_stop_is_no_motion(backward: float) -> None:
    """A hair of backward velocity at a stop must not turn deceleration into acceleration."""
    coefficients = np.zeros((2, ORDER, 1))
    coefficients[0, 2] = 2.0
    coefficients[1, :3, 0] = 18.0, 12.0 - backward, -6.0
    peaks = Trajectory(("x",), np.array([3.0, 1.0]), coefficients).peaks
    assert_allclose(peaks.acceleration.value, [4.0], rtol=1e-14)
    assert_allclose(peaks.deceleration.value, [12.0], rtol=1e-14)


def test_a_slow_axis_beside_a_fast_one_is_judged_by_itself() -> None:
    """What is standing still for one axis is a motion for another."""
    slow = renamed(travel(distance=8e-12), "y")
    for parts, scale in (([travel(), slow], [1, 1e-12]), ([slow, travel()], [1e-12, 1])):
        velocity, acceleration, deceleration, _ = Trajectory.stack(parts).peaks
        for peak in (velocity, acceleration, deceleration):
            assert_allclose(peak.value, 8 * np.array(scale), rtol=1e-14)


@given(trajectories(decades=3), st.lists(st.booleans(), min_size=3, max_size=3))
def test_no_sample_is_faster_than_the_greatest_speed(
    trajectory: Trajectory, chosen: list[bool]
) -> None:
    """Speed along the path is the root of a polynomial, exact in every piece."""
    members = chosen[: len(trajectory.axes)]
    speeds = trajectory.speeds(members)
    counted = np.array(members)[:, np.newaxis]
    speed = np.sqrt((np.where(counted, sampled(trajectory, 1), 0.0) ** 2).sum(axis=1))
    greatest = speed.max(axis=-1)
    size = np.linalg.norm(bound(trajectory, 1), axis=-1)
    # The root of a rounded square: near standstill its error is the root of a rounding.
    assert np.all(greatest**2 <= speeds.value**2 + 1e-13 * size**2), f"{greatest} beyond {speeds}"
    reach = np.linalg.norm(bound(trajectory, 2), axis=-1) * gap(trajectory)[:, 0]
    assert np.all(speeds.value <= greatest + reach + 1e-6 * size), f"{speeds} beyond {greatest}"
    local = speeds.time - trajectory.breaks[:-1]
    assert np.all((local >= -1e-12) & (local <= trajectory.durations * (1 + 1e-9) + 1e-9))


@given(trajectories(), st.integers(0, 3))
def test_jumps_are_the_steps_at_the_breaks(trajectory: Trajectory, derivative: int) -> None:
    """Before and after the motion is at rest, so a velocity at its beginning or end is a jump."""
    ends = sampled(trajectory, derivative)[..., [0, -1]]
    outside = np.zeros(len(trajectory.axes))
    before, after = np.vstack([outside, ends[..., 1]]), np.vstack([ends[..., 0], outside])
    if derivative == 0:
        before[0], after[-1] = after[0], before[-1]
    steps = np.abs(after - before)
    jump = trajectory.jumps(derivative)
    atol = ROUNDING * bound(trajectory, derivative).max()
    assert_allclose(jump.value, steps.max(axis=0), rtol=0, atol=atol)
    for axis, time in enumerate(jump.time):
        index = np.flatnonzero(trajectory.breaks == time)[0]
        assert_allclose(steps[index, axis], jump.value[axis], rtol=0, atol=atol)


def test_a_smooth_motion_has_no_jump_in_velocity() -> None:
    """Its acceleration jumps at the beginning, in the middle twice as much, and at the end."""
    motion = travel()
    assert_array_equal(motion.jumps(0).value, [0.0])
    assert_array_equal(motion.jumps(1).value, [0.0])
    assert_array_equal(motion.jumps(2).value, [16.0])
    assert_array_equal(motion.jumps(2).time, [1.0])


@pytest.mark.parametrize(("piece", "time"), [(0, 1.0), (1, 0.0)])
def test_a_motion_that_begins_or_ends_in_full_swing_jumps(piece: int, time: float) -> None:
    """Half of a move: the velocity is there at once, or is still there at the end."""
    motion = travel()
    only = slice(piece, piece + 1)
    half = Trajectory(("x",), motion.durations[only], motion.coefficients[only])
    assert_array_equal(half.jumps(0).value, [0.0])
    for derivative in (1, 2):
        assert_array_equal(half.jumps(derivative).value, [8.0])
    assert_array_equal(half.jumps(1).time, [time])


def test_outside_its_time_the_motion_is_at_rest() -> None:
    """Position is held before the beginning and after the end, from the end on nothing moves."""
    motion = travel()
    assert_array_equal(motion.at([-np.inf, -1.0, 0.0]).ravel(), [0.0, 0.0, 0.0])
    assert_array_equal(motion.at([2.0, 3.0, np.inf]).ravel(), [8.0, 8.0, 8.0])
    for derivative in (1, 2, 3):
        assert_array_equal(motion.at([-1e-9, 2.0, 3.0], derivative), np.zeros((3, 1)))


def test_at_a_break_the_piece_that_begins_there_counts() -> None:
    """Both at the start and where the acceleration changes its sign."""
    assert_array_equal(travel().at([0.0, 1.0], 2).ravel(), [8.0, -8.0])
    assert_array_equal(travel().at([np.nextafter(1.0, 0.0)], 2).ravel(), [8.0])


def test_a_piece_that_takes_no_time_is_passed_over() -> None:
    """At its time the next piece with a duration counts, and its derivatives are bounded."""
    motion = travel()
    durations = np.array([1.0, 0.0, 1.0])
    coefficients = motion.coefficients[[0, 1, 1]]
    longer = Trajectory(motion.axes, durations, coefficients)
    times = np.linspace(-0.5, 2.5, 61)
    for derivative in range(4):
        assert_array_equal(longer.at(times, derivative), motion.at(times, derivative))
        assert_array_equal(longer.extremes(derivative), motion.extremes(derivative))
    assert_array_equal(longer.last, motion.last)


def test_a_stay_that_takes_no_time_has_a_position() -> None:
    """A step that moves nothing is still somewhere."""
    stay = Trajectory.rest(("x", "y"), np.array([3.0, -4.0]))
    assert stay.duration == 0
    assert_array_equal(stay.at([-1.0, 0.0, 1.0]), np.tile([3.0, -4.0], (3, 1)))
    assert_array_equal(stay.at([0.0], 1), np.zeros((1, 2)))
    assert_array_equal(stay.last, [3.0, -4.0])
    assert all(not peak.value.any() for peak in stay.peaks)
    assert not stay.jumps(0).value.any()
    assert not stay.speeds([True, True]).value.any()


@given(trajectories(), st.floats(0, 10))
def test_a_stay_moves_nothing(trajectory: Trajectory, duration: float) -> None:
    """A wait holds where the motion ended, for its time."""
    stay = Trajectory.rest(trajectory.axes, trajectory.last, duration)
    assert duration == stay.duration
    assert_array_equal(stay.first, trajectory.last)
    assert_array_equal(stay.last, trajectory.last)
    assert all(not peak.value.any() for peak in stay.peaks)


@given(trajectories(axes=1), trajectories(axes=1))
def test_a_chain_plays_one_after_the_other(one: Trajectory, two: Trajectory) -> None:
    """Each part as when it is played alone, later by what went before; stays of no time go."""
    nothing = Trajectory.rest(("x",), np.array([99.0]))
    chain = Trajectory.chain([nothing, one, nothing, two, nothing])
    assert_allclose(chain.duration, one.duration + two.duration, rtol=1e-14)
    assert_array_equal(chain.durations, np.concatenate([one.durations, two.durations]))
    shares = np.linspace(0.001, 0.999, 23)
    for derivative in range(4):
        size = max(bound(part, derivative).max() for part in (one, two))
        slope = max(bound(part, derivative + 1).max() for part in (one, two)) * chain.duration
        for start, part in ((0.0, one), (one.duration, two)):
            times = shares * part.duration
            away = np.abs(times - part.breaks[:, np.newaxis]).min(axis=0) > 1e-9
            assert_allclose(
                chain.at(start + times[away], derivative),
                part.at(times[away], derivative),
                rtol=0,
                atol=ROUNDING * (size + slope),
            )
    assert_array_equal(chain.first, one.first)
    assert_array_equal(chain.last, two.last)


def test_a_chain_of_nothing_stays() -> None:
    """Steps that take no time leave the machine where it is."""
    stay = Trajectory.rest(("x",), np.array([5.0]))
    chain = Trajectory.chain([stay, stay])
    assert chain.duration == 0
    assert_array_equal(chain.at([0.0]), [[5.0]])


@given(trajectories(axes=2), trajectories(axes=1), trajectories(axes=1))
def test_a_stack_moves_every_axis_as_its_part_does(
    one: Trajectory, two: Trajectory, three: Trajectory
) -> None:
    """The union of breaks changes no motion, and a part that has ended rests."""
    parts = [one, renamed(two, "a"), renamed(three, "b")]
    stack = Trajectory.stack(parts)
    assert stack.axes == (*one.axes, "a", "b")
    assert_allclose(stack.duration, max(part.duration for part in parts), rtol=1e-15)
    breaks = np.concatenate([part.breaks for part in parts])
    times = np.linspace(-0.1, 1.1, 97) * stack.duration
    times = times[np.abs(times - breaks[:, np.newaxis]).min(axis=0) > 1e-9]
    for derivative in range(4):
        expected = np.concatenate([part.at(times, derivative) for part in parts], axis=-1)
        # About another break the terms are of the size that they reach over a whole piece.
        size = max(
            (bound(part, derivative) + bound(part, derivative + 1) * part.duration).max()
            for part in parts
        )
        assert_allclose(stack.at(times, derivative), expected, rtol=0, atol=ROUNDING * size)


def test_a_stack_cuts_every_axis_at_every_break() -> None:
    """Each piece is one polynomial on every axis, also where breaks differ by rounding."""
    short, late = travel(duration=1.0), travel(duration=2.0)
    nearly = Trajectory(("z",), late.durations * (1 + 2e-16), late.coefficients)
    stack = Trajectory.stack([short, renamed(late, "y"), nearly])
    nanoseconds = np.unique(np.rint(stack.breaks * 1e9))
    assert_array_equal(nanoseconds, [0.0, 0.5e9, 1e9, 2e9])
    assert_allclose(stack.last, [8.0, 8.0, 8.0], rtol=1e-14)
    assert_allclose(stack.jumps(0).value, 0, atol=1e-14)
    assert_allclose(stack.jumps(1).value, 0, atol=1e-13)
    velocity, acceleration, deceleration, _ = stack.peaks
    assert_allclose(velocity.value, [16.0, 8.0, 8.0], rtol=1e-14)
    for peak in (acceleration, deceleration):
        assert_allclose(peak.value, [32.0, 8.0, 8.0], rtol=1e-14)


def test_a_stack_of_stays_that_take_no_time_is_one() -> None:
    """Nothing moves, yet every axis has its position."""
    parts = [Trajectory.rest((name,), np.array([index])) for index, name in enumerate("xyz")]
    stack = Trajectory.stack(parts)
    assert stack.duration == 0
    assert_array_equal(stack.at([0.0]), [[0.0, 1.0, 2.0]])
    moving = Trajectory.stack([parts[1], travel()])
    assert_array_equal(moving.at([1.0]), [[1.0, 4.0]])


@given(trajectories(), st.floats(0.01, 100))
def test_a_stretched_motion_runs_through_the_same_positions(
    trajectory: Trajectory, factor: float
) -> None:
    """With c = old over new time derivatives fall with its powers (Hollerbach 1984)."""
    stretched = trajectory.stretched(factor * trajectory.duration)
    assert_allclose(stretched.duration, factor * trajectory.duration, rtol=1e-14)
    for derivative in range(4):
        expected = sampled(trajectory, derivative) / factor**derivative
        size = bound(trajectory, derivative).max() / factor**derivative
        assert_allclose(sampled(stretched, derivative), expected, rtol=0, atol=ROUNDING * size)


@settings(max_examples=20)
@given(trajectories(pieces=3, axes=2))
def test_a_long_motion_is_judged_like_its_parts(trajectory: Trajectory) -> None:
    """The same motion many times over has the same extremes, each found the first time."""
    many = Trajectory.chain([trajectory] * 100)
    assert many.durations.size == 100 * trajectory.durations.size
    for derivative in range(4):
        for once, often in zip(
            trajectory.extremes(derivative), many.extremes(derivative), strict=True
        ):
            assert_array_equal(often.value, once.value)
            assert_array_equal(often.time, once.time)
    members = [True] * len(many.axes)
    assert_array_equal(many.speeds(members).value, np.tile(trajectory.speeds(members).value, 100))


def test_a_hundred_thousand_pieces_are_judged() -> None:
    """An hour of short moves is one trajectory, and it must not take minutes to judge."""
    there = travel()
    back = Trajectory(there.axes, there.durations, there.coefficients * -1.0)
    back.coefficients[:, 0] += 8.0
    many = Trajectory.chain([there, back] * 25_000)
    assert many.durations.size == 100_000
    assert_allclose([peak.value.item() for peak in many.peaks], [8.0, 8.0, 8.0, 0.0], rtol=1e-14)
    assert_allclose(many.speeds([True]).value, 8.0, rtol=1e-14)
    assert_array_equal(many.jumps(1).value, [0.0])
    assert_allclose(many.at(many.breaks[[1, 2, 3, -1]]).ravel(), [4.0, 8.0, 4.0, 0.0], atol=1e-9)


@pytest.mark.parametrize("shape", [(1, ORDER, 2), (2, ORDER, 1), (1, ORDER - 1, 1)])
def test_coefficients_of_another_shape_are_refused(shape: tuple[int, ...]) -> None:
    """A piece, a power or an axis too many would be read as something else."""
    with pytest.raises(ValueError, match=r"coefficients of shape \(1, 6, 1\) needed"):
        Trajectory(("x",), np.ones(1), np.zeros(shape))
