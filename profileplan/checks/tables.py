"""Do the positions of a setpoint table keep the limits?"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from profileplan.checks.findings import (
    FLOAT_ROUNDING,
    LIMIT_TOLERANCE,
    QUANTITIES,
    TICK_TOLERANCE,
    Finding,
    Worst,
    rate_unit,
    travel_ends,
    upper,
)

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.inputs import Axis, Machine
    from profileplan.motion.polynomials import Array
    from profileplan.setpoints import SetpointTable


def check_table(table: SetpointTable, machine: Machine) -> tuple[Finding, ...]:
    """Judge the positions of a setpoint table by their differences.

    The machine stands before the first row and after the last one. If a motion keeps its limits,
    then so do the first, second and third difference of its positions, divided by the period, its
    square and its cube: each is a mean of the derivative over the rows that it spans. So a
    difference beyond a limit proves that every motion through these positions breaks it.

    Parameters
    ----------
    table : SetpointTable
    machine : Machine

    Returns
    -------
    tuple of Finding
        Axis by axis: travel, velocity, acceleration, deceleration and jerk; then the period.
        Where rounding alone could break a limit the finding is not ``decided``.
    """
    steps = np.diff(table.time)
    period = float(np.median(steps)) if steps.size else machine.setpoints.period
    findings: list[Finding] = []
    for column, axis in enumerate(machine.axes):
        findings += _table_travel(table, axis, table.position[:, column])
        findings += _differences(table, axis, table.position[:, column], period)
    uneven = np.abs(steps - period)
    if uneven.size:
        worst = int(uneven.argmax())
        findings.append(
            upper(
                Worst(float(uneven[worst]), float(table.time[worst + 1])),
                "even period",
                TICK_TOLERANCE,
                "s",
            )
        )
    return tuple(findings)


def _table_travel(table: SetpointTable, axis: Axis, position: Array) -> list[Finding]:
    low, high = int(position.argmin()), int(position.argmax())
    return travel_ends(
        axis,
        Worst(float(position[low]), float(table.time[low])),
        Worst(float(position[high]), float(table.time[high])),
    )


def _differences(
    table: SetpointTable, axis: Axis, position: Array, period: float
) -> Iterator[Finding]:
    """Judge the differences of an axis's positions, padded with standstill at both ends.

    Notes
    -----
    A row's second difference spans a period before and one after it. If the axis stood still at
    some instant in one of these, its mean velocity there is at most half of period times greatest
    acceleration. So where both are larger and of one sign, the axis ran one way, and acceleration
    or deceleration bounds the difference by its sign; elsewhere the greater of the two does.
    """
    rest = np.pad(position, 3, mode="edge")
    velocity = np.diff(rest) / period
    acceleration = np.diff(velocity) / period
    limits = axis.limits
    before, after = velocity[:-1], velocity[1:]
    still = 0.5 * period * max(limits.acceleration, limits.deceleration)
    one_way = (np.minimum(np.abs(before), np.abs(after)) > still) & (before * after > 0)
    slows = acceleration * (before + after) < 0
    slows = np.where(one_way, slows, limits.deceleration > limits.acceleration)
    size = np.abs(acceleration)
    # A position is rounded as it is written, as a number, and as the time that it belongs to is.
    last_digit = table.position_step + FLOAT_ROUNDING * float(
        np.spacing(np.abs(position).max()) + np.spacing(table.time[-1]) * np.abs(velocity).max()
    )
    sizes = {
        "velocity": np.abs(velocity),
        "acceleration": np.where(slows, 0.0, size),
        "deceleration": np.where(slows, size, 0.0),
        "jerk": np.abs(np.diff(acceleration)) / period,
    }
    for row, (quantity, order) in enumerate(QUANTITIES.items()):
        limit = limits[row]
        if not np.isfinite(limit):
            continue
        worst = int(sizes[quantity].argmax())
        time = float(table.time[min(max(worst - 3 + order, 0), table.time.size - 1)])
        found = Worst(float(sizes[quantity][worst]), time)
        # The magnitudes of a difference's weights sum to 2^order; each position may be half of its
        # last digit off.
        rounding = 2 ** (order - 1) * last_digit / period**order
        finding = upper(found, quantity, limit, rate_unit(axis, order), axis)
        within = found.value <= limit * (1 + LIMIT_TOLERANCE) + rounding
        yield replace(finding, rounding=rounding, ok=bool(within))
