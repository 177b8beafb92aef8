"""What does one get who plans a cycle, and how is it shown?"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from profileplan.results import PlannedCycle

if TYPE_CHECKING:
    from pathlib import Path

    from matplotlib.figure import Figure


@dataclass(frozen=True, eq=False)
class Plan(PlannedCycle):
    """A planned cycle, with its page and its pictures.

    Examples
    --------
    >>> from profileplan import Axis, Cycle, Machine, Move, plan
    >>> machine = Machine(
    ...     name="feeder",
    ...     axes=(Axis("x", travel=(0.0, 500.0), velocity=1000.0, acceleration=5000.0),),
    ... )
    >>> cycle = Cycle(steps=(Move({"x": 300.0}),), start={"x": 0.0})
    >>> plan(machine, cycle).duration
    0.5
    """

    def report(self, file: Path | str, *, date: str | None = None) -> None:
        """Write the plan as one self-contained page, as ``report.write_page`` does."""
        from profileplan.report import write_page  # noqa: PLC0415

        write_page(self, file, date=date)

    def plot(self) -> Figure:
        """Return curves and plan view as a matplotlib figure, as ``report.draw`` does."""
        from profileplan.report import draw  # noqa: PLC0415

        return draw(self)

    def _repr_html_(self) -> str:
        """Return the verdict and the steps for a notebook."""
        from profileplan.report import brief  # noqa: PLC0415

        return brief(self)
