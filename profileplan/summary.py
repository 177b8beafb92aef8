"""What does a script read of a plan? The content of summary.json.

Numbers are in axis units and s. What is not limited or not known is null.
"""

from __future__ import annotations

import json
import math
from typing import TYPE_CHECKING, NamedTuple

from profileplan import checks, setpoints
from profileplan.inputs import PathStep
from profileplan.results import RAISE

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence
    from pathlib import Path

    from profileplan.inputs import Part
    from profileplan.results import Limit, PlannedCycle, PlannedStep

CAUTION = (
    "A plan is not a safety function. Try every motion at reduced speed first. Risk assessment, "
    "guarding and the local codes are for qualified people."
)
"""What goes with every plan that leaves the program."""


def summarise(plan: PlannedCycle) -> dict[str, object]:
    """Return a plan and the findings on it as plain values, ready for JSON.

    Parameters
    ----------
    plan : PlannedCycle

    Returns
    -------
    dict
        The keys of summary.json as README lists them.
    """
    findings = plan.check()
    return {
        "cycle_time_s": plan.duration,
        "target_s": plan.target,
        "meets_target": plan.meets_target,
        "requirements_met": all(finding.ok for finding in findings),
        "steps": [
            _step(plan, step, asked)
            for step, asked in zip(plan.steps, plan.job.cycle.steps, strict=True)
        ],
        **_parts(plan),
        "checks": [finding_values(finding) for finding in findings],
        "levers": [
            {
                **_limit(lever.limit),
                "saves_s": lever.limit.saves,
                "time_s": lever.time,
                "steps": list(lever.steps),
            }
            for lever in plan.levers
        ],
        "notes": list(plan.notes),
        "caution": CAUTION,
    }


class PartTime(NamedTuple):
    """When a part is begun, and how long it takes [s]."""

    part: Part
    start: float
    duration: float


def part_times(plan: PlannedCycle) -> tuple[PartTime, ...]:
    """Return the times of all parts of a plan, in order."""
    times = []
    for part in plan.job.cycle.parts:
        steps = plan.steps[part.first : part.last + 1]
        # a sum of durations is the same for equal parts; a difference of times is rounded
        duration = math.fsum(step.duration for step in steps)
        times.append(PartTime(part, steps[0].start, duration))
    return tuple(times)


def slowest(times: Sequence[PartTime]) -> PartTime:
    """Return the part that takes longest, the first of several."""
    return max(times, key=lambda time: time.duration)


def mean_duration(times: Sequence[PartTime]) -> float:
    """Return how long the parts take on average [s]."""
    return math.fsum(time.duration for time in times) / len(times)


def finding_values(finding: checks.Finding) -> dict[str, object]:
    """Return a finding as plain values, ready for JSON."""
    return {
        "check": finding.check,
        "axis": finding.axis,
        "value": finding.value,
        "limit": finding.limit,
        "margin": finding.margin,
        "unit": finding.unit,
        "use": finding.use,
        "ok": finding.ok,
        "rounding": finding.rounding,
        "decided": finding.decided,
        "time_s": finding.time,
        "step": finding.step,
        **({"what": finding.what} if finding.what else {}),
        **({} if finding.line is None else {"line": finding.line}),
        **(
            {}
            if finding.first is None
            else {"first_line": finding.first.line, "first_time_s": finding.first.time}
        ),
    }


def write_json(values: Mapping[str, object], file: Path) -> None:
    """Write plain values to a JSON file, which is replaced when it is complete.

    Raises
    ------
    InputError
        The file cannot be written.
    """
    with setpoints.replacing(file) as stream:
        stream.write(text(values))


def text(values: Mapping[str, object]) -> str:
    """Return plain values as JSON, the same for the same values."""
    return json.dumps(values, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def uses(plan: PlannedCycle, step: PlannedStep) -> dict[str, dict[str, float]]:
    """Return the share of each limit that a step uses at most: quantity → axis → share.

    Limits that an axis does not have are left out.
    """
    return {
        quantity: {
            axis.name: peak / axis.limits[row]
            for axis, peak in zip(
                plan.job.machine.axes, step.trajectory.peaks[row].value.tolist(), strict=True
            )
            if math.isfinite(axis.limits[row])
        }
        for row, quantity in enumerate(checks.QUANTITIES)
    }


def _parts(plan: PlannedCycle) -> dict[str, object]:
    """Return the times of parts; nothing where there are none."""
    times = part_times(plan)
    if not times:
        return {}
    return {
        "parts": [
            {"name": time.part.name, "start_s": time.start, "duration_s": time.duration}
            for time in times
        ],
        "slowest_part": slowest(times).part.name,
        "mean_part_s": mean_duration(times),
    }


def _step(plan: PlannedCycle, step: PlannedStep, asked: object) -> dict[str, object]:
    return {
        "name": step.name,
        "kind": step.kind,
        "start_s": step.start,
        "duration_s": step.duration,
        "least_time_s": step.least_time,
        "limited_by": [_limit(limit) for limit in step.limited_by],
        **_corridor(step, asked),
        "peaks": _peaks(plan, step),
    }


def _corridor(step: PlannedStep, asked: object) -> dict[str, object]:
    """Return what holds a step back where, and what loosening helps, for one through a corridor."""
    if not step.stretches:
        return {}
    return {
        "gains": [{**_limit(limit), **_gain(limit, asked)} for limit in step.limited_by],
        "stretches": [
            {"start_s": held.start, "end_s": held.end, "limited_by": _limit(held.limit)}
            for held in step.stretches
        ],
    }


def _gain(limit: Limit, asked: object) -> dict[str, float]:
    """Return the seconds gained for each percent of a limit, or for each mm of tolerance."""
    if limit.quantity == "tolerance" and isinstance(asked, PathStep) and asked.tolerance:
        return {"s_per_mm": limit.saves / (RAISE * asked.tolerance)}
    return {"s_per_percent": limit.saves / (100 * RAISE)}


def _limit(limit: Limit) -> dict[str, str | None]:
    return {"axis": limit.axis, "quantity": limit.quantity}


def _peaks(plan: PlannedCycle, step: PlannedStep) -> dict[str, dict[str, float | None]]:
    """Return the peaks of every axis. Without a jerk limit the acceleration may jump: no number."""
    rows: Sequence[list[float]] = [peak.value.tolist() for peak in step.trajectory.peaks]
    return {
        axis.name: {
            quantity: rows[row][column]
            if quantity != "jerk" or math.isfinite(axis.limits.jerk)
            else None
            for row, quantity in enumerate(checks.QUANTITIES)
        }
        for column, axis in enumerate(plan.job.machine.axes)
    }
