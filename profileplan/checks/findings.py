"""What is a finding, and when does it count as met?

A limit holds when it is exceeded by no more than rounding explains (``LIMIT_TOLERANCE``).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

if TYPE_CHECKING:
    from profileplan.inputs import Axis

LIMIT_TOLERANCE = 1e-9
"""Share by which a value may pass its limit: what rounding explains."""

ARRIVAL_TOLERANCE = 1e-9
"""Greatest distance [mm or deg] from a commanded position that counts as arrival, and greatest jump
of a position between two pieces."""

PATH_TOLERANCE = 1e-6
"""Distance [mm or deg] by which a path's tolerance may be passed."""

REST_TOLERANCE = 1e-9
"""Time [s] by which a rest at a point may be too short."""

TIME_ROUNDING = 8 * np.finfo(np.float64).eps
"""Rounding of the time of a break, as a share of the duration of its step."""

TICK_TOLERANCE = 1e-9
"""Greatest deviation [s] of a row's time from an even period."""

FLOAT_ROUNDING = 8.0
"""Rounding of a computed position or time, in units of its last binary digit."""

QUANTITIES = {"velocity": 1, "acceleration": 2, "deceleration": 2, "jerk": 3}
"""The limits of an axis, in the order of its record, and the derivatives that they bound."""


MOTOR_CHECKS = ("peak torque", "rms torque", "motor speed")
"""What is judged of an axis's motor."""

SHARED = (*QUANTITIES, *MOTOR_CHECKS, "speed", "cycle time", "tolerance")
"""Checks whose limits are used up in part."""


class Row(NamedTuple):
    """A row of a table: its line in the file, and its time [s]."""

    line: int
    time: float


@dataclass(frozen=True)
class Finding:
    """One requirement, and what the motion makes of it.

    Parameters
    ----------
    check : str
        What is required: "travel, low end", "velocity", "arrival", "cycle time", ...
    axis : str, optional
        The axis it concerns; None for the motion as a whole.
    value, limit : float
        The worst value of the motion, and what is allowed, in ``unit``.
    margin : float
        How far the value stays from the limit, in ``unit``; negative where it passes it.
    unit : str
        Unit of all three.
    ok : bool
        Whether the requirement is met.
    rounding : float
        Share of the value that rounding can explain, in ``unit``: it is allowed for.
    time : float, optional
        When the worst value occurs, from the beginning of the cycle [s].
    step : str, optional
        The step in which it occurs.
    what : str
        What it is between: "tool to kiln car post"; empty where axis and step say all.
    line : int, optional
        The line of a table's file in which the worst value occurs.
    first : Row, optional
        The first row of a table that does not meet it.
    """

    check: str
    axis: str | None
    value: float
    limit: float
    margin: float
    unit: str
    ok: bool
    rounding: float = 0.0
    time: float | None = None
    step: str | None = None
    what: str = ""
    line: int | None = None
    first: Row | None = None

    @property
    def use(self) -> float | None:
        """Share of the limit that is used, 1 at the limit; None where a share means nothing."""
        return self.value / self.limit if self.check in SHARED and self.limit > 0 else None

    @property
    def decided(self) -> bool:
        """Whether rounding leaves enough of the value to judge it by."""
        return self.rounding < self.limit or not self.rounding


class Worst(NamedTuple):
    """The worst value of a quantity: when [s from the beginning of the cycle], in which step."""

    value: float
    time: float | None = None
    step: str | None = None


def worse(*cases: Worst) -> Worst:
    """Return the case of the greatest value; the first of equals."""
    return max(cases, key=lambda case: case.value)


def upper(worst: Worst, check: str, limit: float, unit: str, axis: Axis | None = None) -> Finding:
    """Return the finding that a value stays at or below a limit."""
    return Finding(
        check=check,
        axis=axis.name if axis else None,
        value=worst.value,
        limit=float(limit),
        margin=float(limit) - worst.value,
        unit=unit,
        ok=bool(worst.value <= limit * (1 + LIMIT_TOLERANCE)),
        time=worst.time,
        step=worst.step,
    )


def nearness(axis: Axis) -> float:
    """Return how near a position counts as reached [mm or deg]: far from 0 none is finer."""
    spacing = float(np.spacing(max(map(abs, axis.travel))))
    return max(ARRIVAL_TOLERANCE, FLOAT_ROUNDING * spacing)


def rate_unit(axis: Axis, derivative: int) -> str:
    """Return the unit of a derivative of an axis's position."""
    return axis.unit + ("", "/s", "/s²", "/s³")[derivative]


def travel_ends(axis: Axis, low: Worst, high: Worst) -> list[Finding]:
    """Return the findings that an axis stays between the ends of its travel."""
    highest = upper(high, "travel, high end", axis.travel[1], axis.unit, axis)
    lowest = upper(low, "travel, low end", axis.travel[0], axis.unit, axis)
    ends = [replace(lowest, margin=low.value - axis.travel[0]), highest]
    return [replace(end, ok=end.margin >= -nearness(axis)) for end in ends]
