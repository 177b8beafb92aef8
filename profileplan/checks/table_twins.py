"""Do the columns of the second drive of an axis say what those of the first do?"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from profileplan.checks.findings import FLOAT_ROUNDING, rate_unit
from profileplan.checks.table_extremes import Doubt, Extreme, Places, Steps

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.checks.findings import Finding
    from profileplan.inputs import Axis
    from profileplan.motion.polynomials import Array
    from profileplan.setpoints.columns import Sheet

RATES = {"pos": "", "vel": "velocity ", "acc": "acceleration ", "jerk": "jerk "}
"""Quantities, and how their columns are called."""


class TwinJudge:
    """Judges whether both drives of an axis are at the same place at the same speed.

    Both are rounded for themselves: half of a last decimal, or of an increment, of each is allowed.

    Parameters
    ----------
    sheet : Sheet
    number : int
        The axis, counted from 0.
    axis : Axis
    steps : Steps
    """

    def __init__(self, sheet: Sheet, number: int, axis: Axis, *, steps: Steps) -> None:
        self._axis = axis
        self._steps = steps
        self._wrap = 0.0
        self._shift = 0.0
        self._pairs: list[tuple[str, int, int, Extreme]] = []
        for quantity in RATES:
            own = sheet.find(quantity, number)
            other = sheet.find(quantity, number, drive=1)
            if own is not None and other is not None:
                self._pairs.append((quantity, own, other, Extreme(steps)))
                if quantity == "pos":
                    columns = [sheet.columns[own], sheet.columns[other]]
                    self._wrap = max(column.wrap * abs(column.unit) for column in columns)
                    self._shift = max(abs(column.shift) for column in columns)
        self._apart: float | None = None

    def see(self, values: Array, places: Places) -> None:
        """Judge rows, (n, k), in units of the axes."""
        for quantity, own, other, extreme in self._pairs:
            first, second = values[:, own], values[:, other]
            apart = second - first
            size = np.maximum(np.abs(first), np.abs(second))
            if quantity == "pos":
                apart = apart - self._turns_apart(float(apart[0]))
                size = size + self._shift
            doubt = Doubt((own, other), (0.5, 0.5), 2 * FLOAT_ROUNDING * np.spacing(size))
            extreme.see(np.abs(apart), 0.0, places, doubt)

    def findings(self) -> Iterator[Finding]:
        """Yield what was found."""
        for order, name in enumerate(RATES.values()):
            for quantity, _, _, extreme in self._pairs:
                if RATES[quantity] != name:
                    continue
                found = extreme.finding(
                    f"second drive, {name}agreement", rate_unit(self._axis, order), self._axis
                )
                if found is not None:
                    limit = found.rounding
                    yield replace(found, limit=limit, margin=limit - found.value, rounding=0.0)

    def _turns_apart(self, apart: float) -> float:
        """Return by how many turns the counters differ from the first row on [mm or deg]."""
        if self._apart is None:
            self._apart = self._wrap * round(apart / self._wrap) if self._wrap else 0.0
        return self._apart
