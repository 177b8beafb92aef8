"""What does a notebook show of a plan?"""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

from profileplan import wording
from profileplan.summary import CAUTION

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.results import PlannedCycle

MOST_STEPS = 30
"""Steps that are shown one by one."""


def brief(planned: PlannedCycle) -> str:
    """Return a plan's verdict and its steps as a piece of HTML, without scripts or styles."""
    return "".join(_brief(planned))


def _brief(planned: PlannedCycle) -> Iterator[str]:
    yield f"<p><strong>{escape(planned.job.machine.name)}</strong>: "
    yield f"{escape(wording.verdict(planned))}; "
    yield f"{escape(wording.requirements(planned.check()))}</p>"
    yield "<table><thead><tr>"
    yield "".join(f"<th>{head}</th>" for head in ("#", "step", "start s", "time s", "limited by"))
    yield "</tr></thead><tbody>"
    for number, step in enumerate(planned.steps[:MOST_STEPS], start=1):
        cells = (str(number), step.name, f"{step.start:.3f}", f"{step.duration:.3f}")
        row = (*cells, wording.held(step))
        yield f"<tr>{''.join(f'<td>{escape(cell)}</td>' for cell in row)}</tr>"
    yield "</tbody></table>"
    if len(planned.steps) > MOST_STEPS:
        yield f"<p>{len(planned.steps) - MOST_STEPS} more steps</p>"
    yield f"<p><small>{escape(CAUTION)}</small></p>"
