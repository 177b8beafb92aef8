"""What is left of a number once it is written: on which grid do a column's values lie?"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from profileplan.setpoints.content import Content, table_fields
from profileplan.setpoints.digits import rounded

if TYPE_CHECKING:
    from profileplan.inputs import Dialect
    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.content import Field


def written_fields(
    schedule: Schedule, content: Content, dialect: Dialect, nanoseconds: int
) -> dict[str, tuple[Field, ...]]:
    """Return the columns of all axes, and of second drives, by their kinds."""
    fields = table_fields(schedule, content, replace(dialect, names={}), nanoseconds)
    return {kind: tuple(own for own in fields if own.kind == kind) for kind in content.columns}


def as_read(own: Field, values: Array, dialect: Dialect) -> Array:
    """Return what a reader makes of values once they are written, in axis units: (n,).

    Positions of a wrapped axis are counted on over all turns.
    """
    counter = own.counter
    if counter is None:
        return _rounded(values, own.decimals, dialect.significant.get(own.kind))
    if own.kind == "pos":
        return counter.positions(counter.counted(values))
    written = _rounded(counter.rate(values), own.decimals, dialect.significant.get(own.kind))
    back: Array = counter.direction * written / float(counter.drive.ratio)
    return back


def position_step(own: Field, greatest: float, dialect: Dialect) -> float:
    """Return what positions up to a magnitude are rounded to [mm or deg].

    With significant digits that is the coarsest step, the one of the greatest position.
    """
    if own.counter is not None:
        return own.counter.drive.resolution
    digits = dialect.significant.get(own.kind)
    if digits is None:
        return 10.0**-own.decimals
    return 10.0 ** (math.floor(math.log10(greatest)) + 1 - digits) if greatest > 0 else 0.0


def position_steps(own: Field, positions: Array, step: float, dialect: Dialect) -> Array:
    """Return positions as they are written, in steps: whole numbers where steps are even."""
    if own.counter is not None:
        return own.counter.counted(positions).astype(np.float64)
    if own.kind not in dialect.significant:
        return rounded(positions, own.decimals)[0]
    steps: Array = as_read(own, positions, dialect) / step
    return steps


def _rounded(values: Array, decimals: int, significant: int | None) -> Array:
    """Return values as they are read back: with some decimals, or some significant digits."""
    if significant is not None:
        return np.array([float(f"{value:.{significant}g}") for value in values.tolist()])
    whole, great = rounded(values, decimals)
    written: Array = whole / 10.0**decimals
    written[great] = values[great]
    return written
