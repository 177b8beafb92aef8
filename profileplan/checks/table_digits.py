"""How finely is a table rounded that is written with significant digits?

Its numbers have the more decimals the smaller they are, so decimals do not tell. The greatest
number that an axis may have is rounded to the coarsest step, and this one counts for all.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Mapping

    from profileplan.inputs import Axis, Machine
    from profileplan.motion.polynomials import Array
    from profileplan.setpoints.columns import Column, Sheet

ROWS_TRIED = 1000
"""Rows of which a number with more digits tells that the table is written otherwise."""


def significant_decimals(
    numbers: Array, sheet: Sheet, machine: Machine, significant: Mapping[str, int]
) -> dict[int, int]:
    """Return the decimals of the coarsest step of each column that has significant digits.

    Parameters
    ----------
    numbers : (n, k) array
        The first rows, as they stand in the file.
    sheet : Sheet
    machine : Machine
    significant : mapping
        Kind of column → significant digits, as a dialect has them.

    Returns
    -------
    dict
        Place of a column → its decimals, fewer than 0 for tens and hundreds. Counts of a drive are
        whole numbers in any dialect.
    """
    found = {}
    for place, column in enumerate(sheet.columns):
        digits = significant.get(column.quantity)
        if digits is None or column.axis < 0 or (column.quantity == "pos" and column.counted):
            continue
        greatest = _greatest(machine.axes[column.axis], column)
        tried = numbers[:ROWS_TRIED, place].tolist()
        if math.isfinite(greatest) and all(float(f"{one:.{digits}g}") == one for one in tried):
            found[place] = digits - 1 - math.floor(math.log10(greatest))
    return found


def _greatest(axis: Axis, column: Column) -> float:
    """Return the greatest number that an axis may have in a column, as it stands in the file."""
    limits = axis.limits
    greatest = {
        "pos": max(map(abs, axis.travel)),
        "vel": limits.velocity,
        "acc": max(limits.acceleration, limits.deceleration),
        "jerk": limits.jerk,
    }[column.quantity]
    return greatest / abs(column.unit)
