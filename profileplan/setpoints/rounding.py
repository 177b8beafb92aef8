"""What does a drive make of rounded positions: how far do derived rates pass the limits?

A drive that takes differences of the positions it is given finds velocity, acceleration and jerk
of the motion with noise: every position is off by half of its last digit at most.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.inputs.dialect import Dialect
from profileplan.setpoints.content import Content
from profileplan.setpoints.drives import judge_drives
from profileplan.setpoints.grids import position_step, position_steps, written_fields
from profileplan.setpoints.sampling import Sampler

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping

    from profileplan.inputs import Axis
    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.content import Field

QUANTITIES = {"velocity": 1, "acceleration": 2, "deceleration": 2, "jerk": 3}
"""Quantities that a drive derives → how many differences that takes."""

NOISY = 0.1
"""Share of a limit from which noise of rounding is worth advice: common practice, no source."""

LIMIT_TOLERANCE = 1e-9
"""Share of a limit by which rounding of doubles may pass it."""

LEAST_STEP = 1e-15
"""Step of positions that are all 0, written in significant digits [mm or deg]."""

ROWS_AT_A_TIME = 16384


@dataclass(frozen=True)
class Noise:
    """What rounding does to a quantity of an axis, as a drive derives it.

    Parameters
    ----------
    axis : str
        Its name, or that of its second drive.
    quantity : str
        A key of ``QUANTITIES``.
    limit : float [mm/s, mm/s² or mm/s³; a rotary axis: deg for mm]
    exact : float
        The greatest from positions that are not rounded.
    derived : float
        The greatest from the positions as they are written.
    rounding : float
        What rounding alone can add at most, and no table of this resolution and period avoids.
    time : float [s]
        Where ``derived`` is first taken.
    advice : str, optional
        What makes the noise small, where it is large.
    """

    axis: str
    quantity: str
    limit: float
    exact: float
    derived: float
    rounding: float
    time: float
    advice: str | None = None

    @property
    def excess(self) -> float:
        """By how much of the limit the derived quantity passes it; negative below it."""
        return self.derived / self.limit - 1

    @property
    def ok(self) -> bool:
        """Whether no more than rounding explains what passes the limit."""
        return self.derived <= self.limit * (1 + LIMIT_TOLERANCE) + self.rounding


class _Channel(NamedTuple):
    """A column of positions, of an axis or of its second drive."""

    name: str
    axis: Axis
    column: int
    field: Field
    step: float


def rounding_noise(
    schedule: Schedule,
    *,
    content: Content | None = None,
    dialect: Dialect | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> tuple[Noise, ...]:
    """Return what rounding does to every limited quantity of every axis and second drive.

    Parameters
    ----------
    schedule : Schedule
    content : Content, optional
        Its period and drives: where an axis has one, its increments are the steps.
    dialect : Dialect, optional
        Its decimals of positions are the steps of the other axes; of significant digits the
        coarsest step counts.
    progress : callable, optional
        Called with the rows looked at so far and the rows in all.

    Raises
    ------
    InputError
        A period out of range, or drives that cannot play the schedule.

    Notes
    -----
    The weights of an n-th difference sum to 2^n in magnitude, so positions that are off by half a
    step change it by 2^(n-1) steps at most.
    """
    content, dialect = content or Content(), dialect or Dialect()
    judge_drives(schedule, content.drives)
    sampler = Sampler(schedule, period=content.period, columns=("pos",))
    channels = _channels(schedule, replace(content, columns=("pos",)), dialect, sampler)
    exact: dict[tuple[str, str], tuple[float, float]] = {}
    derived: dict[tuple[str, str], tuple[float, float]] = {}
    for start in range(0, sampler.count, ROWS_AT_A_TIME):
        rows = range(max(start - 3, 0), min(start + ROWS_AT_A_TIME, sampler.count))
        position = sampler.table(rows).position
        # The machine stands before the first row and behind the last one.
        ends = (3 if start == 0 else 0, 3 if rows.stop == sampler.count else 0)
        first = rows.start - ends[0]
        for one in channels:
            own = np.pad(position[:, one.column], ends, mode="edge")
            steps = position_steps(one.field, own, one.step, dialect)
            for store, counted in ((exact, own / one.step), (derived, steps)):
                for quantity, sizes in _rates(counted, one.step, sampler.period, one.axis):
                    at = int(sizes.argmax())
                    row = min(max(first + at + QUANTITIES[quantity], 0), sampler.count - 1)
                    found = (float(sizes[at]), row * sampler.period)
                    key = (one.name, quantity)
                    store[key] = max(store.get(key, (-1.0, 0.0)), found, key=lambda one: one[0])
        if progress:
            progress(rows.stop, sampler.count)
    return tuple(_findings(channels, exact, derived, sampler.period))


def _channels(
    schedule: Schedule, content: Content, dialect: Dialect, sampler: Sampler
) -> list[_Channel]:
    """Return the columns of positions that drives derive rates from."""
    machine = schedule.job.machine
    low, high = schedule.trajectory.extremes()
    channels = []
    for own in written_fields(schedule, content, dialect, sampler.nanoseconds)["pos"]:
        column = machine.axis_names.index(own.name)
        greatest = max(abs(float(low.value[column])), abs(float(high.value[column])))
        step = position_step(own, greatest, dialect)
        name = own.name if own.counter is None else own.counter.name
        # An axis that stays at 0 has no digits to lose.
        channels.append(_Channel(name, machine.axes[column], column, own, step or LEAST_STEP))
    return channels


def _findings(
    channels: list[_Channel],
    exact: Mapping[tuple[str, str], tuple[float, float]],
    derived: Mapping[tuple[str, str], tuple[float, float]],
    period: float,
) -> Iterator[Noise]:
    for one in channels:
        for row, (quantity, order) in enumerate(QUANTITIES.items()):
            limit = one.axis.limits[row]
            if math.isinf(limit):
                continue
            value, time = derived[one.name, quantity]
            rounding = 2 ** (order - 1) * one.step / period**order
            yield Noise(
                axis=one.name,
                quantity=quantity,
                limit=limit,
                exact=exact[one.name, quantity][0],
                derived=value,
                rounding=rounding,
                time=time,
                advice=_advice(one.axis, order, rounding / limit, one.step, period),
            )


def _advice(axis: Axis, order: int, share: float, step: float, period: float) -> str | None:
    """Return what keeps noise below what is worth a word."""
    if share <= NOISY:
        return None
    finer = step * NOISY / share
    longer = period * (share / NOISY) ** (1 / order)
    return (
        f"rounding alone is up to {100 * share:.0f} % of the limit: steps of {finer:.2g} "
        f"{axis.unit} or finer (now {step:.2g}), or a period of {longer:.2g} s or longer (now "
        f"{period:.2g}), keep it below {100 * NOISY:g} %; else filter what the drive derives, or "
        "give it the velocity too"
    )


def _rates(steps: Array, step: float, period: float, axis: Axis) -> Iterator[tuple[str, Array]]:
    """Yield the magnitudes of the rates that a drive derives from positions in steps.

    A second difference is a deceleration where it opposes the velocities before and after it. The
    axis may have stood still between them if both are small: there the greater limit counts.
    """
    first = np.diff(steps)
    second = np.diff(first)
    velocity = first * (step / period)
    acceleration = second * (step / period**2)
    limits = axis.limits
    before, after = velocity[:-1], velocity[1:]
    still = 0.5 * period * max(limits.acceleration, limits.deceleration)
    one_way = (np.minimum(np.abs(before), np.abs(after)) > still) & (before * after > 0)
    slows = np.where(
        one_way, acceleration * (before + after) < 0, limits.deceleration > limits.acceleration
    )
    size = np.abs(acceleration)
    yield "velocity", np.abs(velocity)
    yield "acceleration", np.where(slows, 0.0, size)
    yield "deceleration", np.where(slows, size, 0.0)
    yield "jerk", np.abs(np.diff(second)) * (step / period**3)
