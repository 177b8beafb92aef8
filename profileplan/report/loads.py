"""How do force, torque and power go over the cycle, in few samples and with all peaks?"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.report.curves import thinned

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.dynamics import Instant
    from profileplan.motion.polynomials import Array
    from profileplan.results import PlannedCycle

A_PIECE = 9
"""Instants of every piece of the motion that are looked at, its ends among them."""

STRETCHES = 2_500
"""Stretches of the cycle of which the least and the greatest sample are kept."""


class LoadCurve(NamedTuple):
    """A load of an axis over the cycle.

    axis : counted from 0; name : "force", "torque" or "power"; unit; limit : greatest magnitude
    allowed, None where none is known; times, values : (m,) arrays [s; N, N·m, W].
    """

    axis: int
    name: str
    unit: str
    limit: float | None
    times: Array
    values: Array


def load_curves(planned: PlannedCycle) -> tuple[LoadCurve, ...]:
    """Return force, torque and power of every axis with mechanics, axis by axis.

    Between samples a curve is straight; the greatest and the least value of the cycle are exact.
    """
    if all(axis.mechanics is None for axis in planned.job.machine.axes):
        return ()
    return tuple(_load_curves(planned))


def _load_curves(planned: PlannedCycle) -> Iterator[LoadCurve]:
    from profileplan import dynamics  # noqa: PLC0415

    exact = {load.axis: load for load in dynamics.loads(planned)}
    times = _times(planned)
    forces, torques = dynamics.forces(planned, times), dynamics.torques(planned, times)
    velocity = planned.trajectory.at(times, 1)
    for index, axis in enumerate(planned.job.machine.axes):
        load = exact.get(axis.name)
        if load is None:
            continue
        if axis.name in torques and axis.motor_turn is not None:
            torque = torques[axis.name]
            limit = None if axis.motor is None else axis.motor.peak_torque
            power = torque * velocity[:, index] * (2 * math.pi / axis.motor_turn)
            kept = _kept(times, torque, load.torque)
            yield LoadCurve(index, "torque", "N·m", limit, *kept)
            yield LoadCurve(index, "power", "W", None, *_kept(times, power, load.power))
        elif axis.name in forces:
            kept = _kept(times, forces[axis.name], load.force)
            yield LoadCurve(index, "force", "N", None, *kept)


def _times(planned: PlannedCycle) -> Array:
    """Return instants of every piece, the last one just before its end: (n k,) [s]."""
    motion = planned.trajectory
    share = np.linspace(0.0, 1.0, A_PIECE)
    times = motion.breaks[:-1, np.newaxis] + motion.durations[:, np.newaxis] * share
    times[:, -1] = np.nextafter(motion.breaks[1:], 0.0)
    return np.maximum.accumulate(times.ravel())


def _kept(
    times: Array, values: Array, extremes: tuple[Instant, Instant] | None
) -> tuple[Array, Array]:
    """Return fewer samples of a curve, with its exact extremes among them."""
    times, values = thinned(times, values, STRETCHES)
    for instant in extremes or ():
        place = int(np.searchsorted(times, instant.time))
        times = np.insert(times, place, instant.time)
        values = np.insert(values, place, instant.value)
    return times, values
