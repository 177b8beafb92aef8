"""Where does each axis stand at every tick of a drive's period?

A table's rows stand at 0, period, 2 periods, ...; the last one is the first tick at or after the
end of the motion, at rest and on target. Units are those of the axes: mm or degree, and s.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt

from profileplan.errors import Fault, InputError
from profileplan.inputs import SetpointSettings

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from profileplan.dynamics import Loads, LoadSampler
    from profileplan.inputs import Machine
    from profileplan.motion.polynomials import Array, Flags, Indices
    from profileplan.motion.schedule import Schedule, SignalEvent

TICK_TOLERANCE = 1e-6
"""Share of a period by which an end or a signal may miss a tick and still count as on it. Less
than the nanosecond that periods are counted in, more than the rounding of times."""


class Column(NamedTuple):
    """A quantity that a table can hold for every axis."""

    derivative: int
    decimals: int


COLUMNS: Mapping[str, Column] = {
    "pos": Column(0, 9),
    "vel": Column(1, 6),
    "acc": Column(2, 6),
    "jerk": Column(3, 6),
}
"""Quantities by the names that select them. Positions have nine decimals, for a drive takes their
third difference: at a period of 1 ms rounding is then at most 4 mm/s³ of jerk."""

LOAD_DECIMALS: Mapping[str, int] = {"force": 2, "torque": 4}
"""What moving takes, of axes whose mechanics say enough: quantity → decimals [N, N·m]."""


@dataclass(frozen=True, eq=False)
class SetpointTable:
    """Setpoints at the ticks of a drive's period.

    Parameters
    ----------
    axes : tuple of str
        Names of the d axes.
    time : (n,) array [s]
    position : (n, d) array [mm]
    velocity, acceleration, jerk : (n, d) arrays, optional [mm/s, mm/s², mm/s³]
    signals : mapping
        Name of a digital output → (n,) array of 0 and 1.
    position_step : float [mm]
        What the last decimal of the positions stands for; 0 where they are not rounded.
    force, torque : mapping
        Name of an axis with mechanics → (n,) array [N, N·m], where they were asked for: the force
        at the slide, the torque at the motor's shaft, both in the axis's own direction.
    """

    axes: tuple[str, ...]
    time: Array
    position: Array
    velocity: Array | None
    acceleration: Array | None
    jerk: Array | None
    signals: Mapping[str, Array]
    position_step: float = 0.0
    force: Loads = field(default_factory=dict, kw_only=True)
    torque: Loads = field(default_factory=dict, kw_only=True)


def row_count(schedule: Schedule, period: float) -> int:
    """Return the number of rows of a schedule's table at a period [s]."""
    return int(np.ceil(schedule.duration / period - TICK_TOLERANCE)) + 1


def sample(
    schedule: Schedule,
    *,
    period: float | None = None,
    columns: Sequence[str] = tuple(COLUMNS),
    rows: range | None = None,
) -> SetpointTable:
    """Return the setpoints of a schedule at the ticks of a period.

    Parameters
    ----------
    schedule : Schedule
    period : float, optional [s]
        Default: that of the machine file.
    columns : sequence of str
        Keys of ``COLUMNS`` and of ``LOAD_DECIMALS``; positions are always there.
    rows : range, optional
        The rows wanted, counted from 0; default: all.
    """
    sampler = Sampler(schedule, period=period, columns=columns)
    return sampler.table(rows if rows is not None else range(sampler.count))


class Sampler:
    """Samples a schedule range by range, at a cost that does not grow with its length.

    Parameters
    ----------
    schedule : Schedule
    period : float, optional [s]
        Default: that of the machine file.
    columns : sequence of str
        Keys of ``COLUMNS`` and of ``LOAD_DECIMALS``; positions are always there.
    """

    def __init__(
        self,
        schedule: Schedule,
        *,
        period: float | None = None,
        columns: Sequence[str] = tuple(COLUMNS),
    ) -> None:
        self.period = period_of(schedule, period)
        self.nanoseconds = round(self.period * 1e9)
        self.count = row_count(schedule, self.period)
        self._trajectory = schedule.trajectory
        self._columns = tuple(columns)
        self._loads = _load_sampler(schedule, columns)
        # Forces follow from velocity and acceleration.
        needed = {"pos", *columns, *(("vel", "acc") if self._loads else ())}
        self._orders = {
            name: column.derivative for name, column in COLUMNS.items() if name in needed
        }
        self._events = _events(schedule)

    def table(self, rows: range) -> SetpointTable:
        """Return the setpoints of some rows, counted from 0."""
        return self.at(np.arange(rows.start, rows.stop))

    def at(self, ticks: npt.NDArray[np.int64]) -> SetpointTable:
        """Return the setpoints at rising ticks, counted from 0: (n,)."""
        # The period is a whole number of nanoseconds: the product is exact before the division.
        time = ticks * self.nanoseconds / 1e9
        # The last row stands at the end or after it: at rest, on target.
        at = np.where(ticks == self.count - 1, np.inf, time)
        pieces, ended = self._pieces(at)
        values = dict(zip(self._orders, self._values(at, pieces, ended), strict=True))
        asked = {name: values[name] for name in values if name in self._columns}
        loads: dict[str, Loads] = {}
        if self._loads:
            over = np.where(ended, self._trajectory.durations.size, pieces)
            loads = self._loads.at(over, velocity=values["vel"], acceleration=values["acc"])
        shown = time + TICK_TOLERANCE * self.period
        return SetpointTable(
            axes=self._trajectory.axes,
            time=time,
            position=values["pos"],
            velocity=asked.get("vel"),
            acceleration=asked.get("acc"),
            jerk=asked.get("jerk"),
            signals={
                name: states[np.searchsorted(times, shown, side="right")]
                for name, (times, states) in self._events.items()
            },
            force=loads.get("force", {}),
            torque=loads.get("torque", {}),
        )

    def _pieces(self, at: Array) -> tuple[Indices, Flags]:
        """Return the piece that each time [s] is in, and whether the motion is over."""
        trajectory = self._trajectory
        pieces = np.searchsorted(trajectory.breaks, at, side="right") - 1
        return (
            np.clip(pieces, 0, trajectory.durations.size - 1),
            at >= trajectory.duration,
        )

    def _values(self, at: Array, pieces: Indices, ended: Flags) -> list[Array]:
        """Return positions and their derivatives at rising times [s], each (n, d).

        The same operations as in ``Trajectory.at``, on the pieces that these times meet.
        """
        trajectory = self._trajectory
        local = at - trajectory.breaks[pieces]
        local = np.clip(local, 0.0, trajectory.durations[pieces])[:, np.newaxis]
        first, last = (int(pieces[0]), int(pieces[-1])) if pieces.size else (0, 0)
        pieces = pieces - first
        coefficients = trajectory.coefficients[first : last + 1]
        found = []
        for order in range(max(self._orders.values()) + 1):
            if order:
                powers = np.arange(1.0, coefficients.shape[1])
                coefficients = coefficients[:, 1:] * powers[:, np.newaxis]
            if order in self._orders.values():
                value = np.zeros((at.size, len(trajectory.axes)))
                for power in range(coefficients.shape[1] - 1, -1, -1):
                    value = value * local + coefficients[:, power].take(pieces, axis=0)
                if order:
                    value[ended] = 0.0
                found.append(value)
        return found


def _load_sampler(schedule: Schedule, columns: Sequence[str]) -> LoadSampler | None:
    """Return what works out the forces and torques asked for, if any are."""
    asked = [name for name in LOAD_DECIMALS if name in columns]
    if not asked:
        return None
    judge_loads(schedule.job.machine, asked)
    # Most tables have neither.
    from profileplan.dynamics import LoadSampler  # noqa: PLC0415

    return LoadSampler(schedule, asked)


def judge_loads(machine: Machine, columns: Sequence[str]) -> None:
    """Refuse forces and torques that no axis has.

    Raises
    ------
    InputError
        Says which axis lacks what.
    """
    faults = [
        Fault("columns", f'"{column}"; {lack}', machine.source)
        for column in columns
        if (lack := machine.lacks(column)) is not None
    ]
    if faults:
        raise InputError(faults)


def unplayed(schedule: Schedule, period: float | None = None) -> tuple[SignalEvent, ...]:
    """Return the signal events that no row shows, for the signal changes again before the next."""
    period = period_of(schedule, period)
    row = {id(event): np.ceil(event.time / period - TICK_TOLERANCE) for event in schedule.events}
    lost = []
    for name in schedule.signals:
        events = [event for event in schedule.events if event.signal == name]
        lost += [one for one, other in pairwise(events) if row[id(one)] == row[id(other)]]
    return tuple(lost)


def period_of(schedule: Schedule, period: float | None) -> float:
    """Return the period asked for, judged as one in a machine file is, or the machine's own [s]."""
    return (
        schedule.job.machine.setpoints.period if period is None else SetpointSettings(period).period
    )


def _events(schedule: Schedule) -> dict[str, tuple[Array, Array]]:
    """Return the times of each signal's events [s], and its states: off, then after each event."""
    times: dict[str, list[float]] = {name: [] for name in schedule.signals}
    states: dict[str, list[float]] = {name: [0.0] for name in schedule.signals}
    for event in schedule.events:
        times[event.signal].append(event.time)
        states[event.signal].append(float(event.state))
    return {name: (np.array(times[name]), np.array(states[name])) for name in times}
