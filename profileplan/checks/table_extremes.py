"""Which value of a table is the worst, and which row is the first to pass a limit?

A table is seen once, some rows at a time. How finely it is rounded is known at its end only, but
never turns out coarser than its rows so far: so the first row is kept for every rounding that is
still possible. What is found does not depend on how many rows are seen together.
"""

from __future__ import annotations

from itertools import product
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.checks.findings import LIMIT_TOLERANCE, Finding, Row
from profileplan.setpoints.layout import MOST_DECIMALS
from profileplan.setpoints.reading import last_decimals

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from profileplan.inputs import Axis
    from profileplan.motion.polynomials import Array, Indices

FINEST = -1
"""Stands for that column of positions that is rounded least: a short number in another may have
lost its zeros."""


class Steps:
    """What the last decimals of columns stand for.

    Parameters
    ----------
    units : (k,) array
        What the numbers in the file are multiplied with.
    positions : sequence of int
        Which columns hold positions.
    decimals : sequence of int
        How many the columns have at least.
    known : float, optional
        What the last decimal of every column stands for, where no numbers tell it.
    fixed : mapping, optional
        Column → its decimals, fewer than 0 for tens and hundreds, where they are known.
    """

    def __init__(
        self,
        units: Array,
        positions: list[int],
        *,
        decimals: Sequence[int] = (),
        known: float | None = None,
        fixed: Mapping[int, int] | None = None,
    ) -> None:
        self._units = units
        self._positions = positions
        self._known = known
        self._fixed = fixed or {}
        self._decimals = np.array(decimals, dtype=np.intp)
        self._decimals[list(self._fixed)] = list(self._fixed.values())
        self._free = [column for column in range(len(decimals)) if column not in self._fixed]
        self._coarsest = self._decimals.copy()

    def see(self, numbers: Array) -> None:
        """Take account of numbers as they are in the file: (n, k)."""
        if self._known is None:
            free = self._free
            self._decimals[free] = last_decimals(numbers[:, free], self._decimals[free])

    def coarsest(self, column: int) -> float:
        """Return what the last decimal of a column stood for before any row was seen."""
        decimals = 0 if self._known is not None else int(self._coarsest[column])
        return self._step(column, decimals)

    def possible(self, columns: tuple[int, ...]) -> Iterator[tuple[tuple[int, ...], list[float]]]:
        """Yield each number of decimals that columns may turn out to have, and their steps."""
        for decimals in product(*(self._range(column) for column in columns)):
            pairs = zip(columns, decimals, strict=True)
            yield decimals, [self._step(column, count) for column, count in pairs]

    def final(self, columns: tuple[int, ...]) -> tuple[tuple[int, ...], list[float]]:
        """Return the decimals of columns of which all rows were seen, and their steps."""
        return next(self.possible(columns))

    def _range(self, column: int) -> range:
        """Return how many decimals a column may turn out to have."""
        if self._known is not None:
            return range(1)
        chosen = self._positions if column == FINEST else [column]
        if fixed := [self._fixed[one] for one in chosen if one in self._fixed]:
            return range(min(fixed), min(fixed) + 1)
        return range(int(self._decimals[chosen].max()), MOST_DECIMALS + 1)

    def _step(self, column: int, decimals: int) -> float:
        if self._known is not None:
            return self._known
        unit = self._units[self._positions].min() if column == FINEST else self._units[column]
        return float(unit) * 10.0**-decimals


class Places(NamedTuple):
    """The rows that values belong to: lines and times, (n,) each."""

    lines: Indices
    time: Array

    def row(self, index: int) -> Row:
        """Return one of them."""
        return Row(int(self.lines[index]), float(self.time[index]))


class Doubt(NamedTuple):
    """What rounding makes of values: the weights of columns' last decimals, and what else there is.

    Weights are numbers or (n,) arrays, in the value's unit per that of the column; ``noise`` is in
    the value's unit.
    """

    columns: tuple[int, ...] = ()
    weights: tuple[float | Array, ...] = ()
    noise: float | Array = 0.0

    def at(self, index: int) -> Doubt:
        """Return that of one value."""
        weights = tuple(_at(weight, index) for weight in self.weights)
        return Doubt(self.columns, weights, _at(self.noise, index))

    def of(self, chosen: Indices) -> Doubt:
        """Return that of some values."""
        weights = tuple(_of(weight, chosen) for weight in self.weights)
        return Doubt(self.columns, weights, _of(self.noise, chosen))

    def rounding(self, steps: list[float]) -> float | Array:
        """Return how far values may be off."""
        return self.noise + sum(
            weight * step for weight, step in zip(self.weights, steps, strict=True)
        )


class _Worst(NamedTuple):
    value: float
    limit: float
    row: Row
    doubt: Doubt


class Extreme:
    """The value that passes its limit by most, or comes nearest to it, and the first that does.

    Parameters
    ----------
    steps : Steps
    """

    def __init__(self, steps: Steps) -> None:
        self._steps = steps
        self._first: dict[tuple[int, ...], Row] = {}
        self.worst: _Worst | None = None

    def see(
        self, values: Array, limits: float | Array, places: Places, doubt: Doubt | None = None
    ) -> int | None:
        """Take account of values, (n,), and return which of them is the worst so far, if one is."""
        if not values.size:
            return None
        doubt = doubt or Doubt()
        excess = values - limits
        most = int(excess.argmax())
        is_worst = self.worst is None or excess[most] > self.worst.value - self.worst.limit
        if is_worst:
            self.worst = _Worst(
                float(values[most]), _at(limits, most), places.row(most), doubt.at(most)
            )
        excess = excess - LIMIT_TOLERANCE * np.abs(limits) - doubt.noise
        over = np.flatnonzero(excess > 0)
        if over.size:
            self._see_first(excess, over, places, doubt)
        return most if is_worst else None

    def finding(self, check: str, unit: str, axis: Axis | None = None) -> Finding | None:
        """Return what was found; None of no values."""
        if self.worst is None:
            return None
        value, limit, row, doubt = self.worst
        decimals, steps = self._steps.final(doubt.columns)
        first = self._first.get(decimals)
        return Finding(
            check=check,
            axis=axis.name if axis else None,
            value=value,
            limit=limit,
            margin=limit - value,
            unit=unit,
            ok=first is None,
            rounding=float(doubt.rounding(steps)),
            time=row.time,
            line=row.line,
            first=first,
        )

    def _see_first(self, excess: Array, over: Indices, places: Places, doubt: Doubt) -> None:
        for decimals, steps in self._steps.possible(doubt.columns):
            if decimals in self._first:
                continue
            allowed = sum(weight * step for weight, step in zip(doubt.weights, steps, strict=True))
            passing = over[excess[over] > np.broadcast_to(allowed, excess.shape)[over]]
            if passing.size:
                self._first[decimals] = places.row(int(passing[0]))


def _at(values: float | Array, index: int) -> float:
    return float(values if np.ndim(values) == 0 else np.asarray(values)[index])


def _of(values: float | Array, chosen: Indices) -> float | Array:
    return values if np.ndim(values) == 0 else np.asarray(values)[chosen]
