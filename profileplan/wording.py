"""In what words is a plan told, on the terminal and on paper?"""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence

    from profileplan.checks import Finding
    from profileplan.results import Limit, PlannedCycle, PlannedStep

SHORT = {"velocity": "vel", "acceleration": "acc", "deceleration": "dec", "jerk": "jerk"}
"""How tables of steps abbreviate what limits a step."""


NAMED = 5
"""How many steps of many are named."""


def verdict(
    planned: PlannedCycle, *, good: Callable[[str], str] = str, bad: Callable[[str], str] = str
) -> str:
    """Return the cycle time, and whether it meets its target.

    Parameters
    ----------
    planned : PlannedCycle
    good, bad : callable
        Mark a word as one that tells of something well, or amiss.
    """
    taken = f"cycle time {planned.duration:.3f} s"
    if planned.target is None:
        return taken
    apart = abs(planned.target - planned.duration)
    if planned.meets_target:
        return f"{taken}; target {planned.target:g} s {good('met')}, {apart:.3f} s to spare"
    short = f"{apart:.3f}" if apart >= 0.0005 else f"{apart:.1g}"
    return f"{taken}; target {planned.target:.9g} s {bad('MISSED')} by {short} s"


def requirements(
    findings: Sequence[Finding],
    *,
    good: Callable[[str], str] = str,
    bad: Callable[[str], str] = str,
) -> str:
    """Return in a line whether all requirements are met; `good` and `bad` as for ``verdict``."""
    failed = sum(not finding.ok for finding in findings)
    if failed:
        return f"{bad('NOT MET')}: {failed} of {len(findings)} requirements"
    open_ones = sum(not finding.decided for finding in findings)
    if open_ones:
        rest = len(findings) - open_ones
        return f"{rest} requirements {good('met')}; {open_ones} cannot be told from so few decimals"
    return f"all {len(findings)} requirements {good('met')}"


def held(step: PlannedStep) -> str:
    """Return what limits a step, axis by axis, the strongest first."""
    by_axis: dict[str, list[str]] = {}
    for limit in step.limited_by:
        word = SHORT.get(limit.quantity, limit.quantity)
        by_axis.setdefault(limit.axis or _plain(limit.quantity), []).append(
            word if limit.axis else ""
        )
    return "; ".join(
        f"{name} {', '.join(quantities)}".strip() for name, quantities in by_axis.items()
    )


def lever(limit: Limit) -> str:
    """Return what could be changed; less of what stands in the way is meant, and more of others."""
    if limit.quantity == "clearance":
        return "height of what is in the way, 10 % less"
    return f"{limit.axis} {limit.quantity}" if limit.axis else _plain(limit.quantity)


def listed(steps: Sequence[str], most: int = NAMED) -> str:
    """Return names of steps in a row, the first few of many."""
    if len(steps) <= most:
        return "; ".join(steps)
    return f"{'; '.join(steps[:most])}; and {len(steps) - most} more"


def required(finding: Finding) -> str:
    """Return what a finding is about."""
    named = f"{finding.axis} {finding.check}" if finding.axis else finding.check
    return f"{named}, {finding.what}" if finding.what else named


REQUIREMENT = ("requirement", "value", "limit", "margin", "unit", "use %", "where")
"""Heads of a table of requirements, but for the last: whether it is met."""


def requirement(finding: Finding) -> list[str]:
    """Return the cells of a requirement below those heads."""
    return [
        required(finding),
        short(finding.value),
        short(finding.limit),
        short(finding.margin, 3),
        finding.unit,
        "" if finding.use is None else f"{100 * finding.use:.1f}",
        at(finding),
    ]


def most(shares: Mapping[str, float]) -> str:
    """Return the greatest share of a limit in percent, and the axis that uses it."""
    axis, share = max(shares.items(), key=lambda item: item[1], default=("", 0.0))
    return f"{100 * share:.0f} {axis}" if share > 0 else ""


def all_amiss(findings: Iterable[Finding]) -> Iterator[str]:
    """Yield how requirements are not met; the verdict tells the target."""
    for finding in findings:
        if not finding.ok and finding.check != "cycle time":
            yield amiss(finding)


def amiss(finding: Finding) -> str:
    """Return in a line how a requirement is not met, and where."""
    allowed = "at least" if finding.value < finding.limit else "allowed"
    where = at(finding)
    return (
        f"{required(finding)}: {finding.value:.6g} {finding.unit}, "
        f"{allowed} {finding.limit:.6g} {finding.unit}{where and f', {where}'}"
    )


def at(finding: Finding) -> str:
    """Return where the worst case is; nowhere in particular where nothing is amiss at 0."""
    somewhere = bool(round(finding.value, 9)) or bool(finding.what)
    parts = [finding.step] if finding.step and somewhere else []
    if finding.time is not None and somewhere:
        parts.append(f"at {finding.time:.3f} s")
    if finding.first is not None and not finding.ok:
        parts = [f"first in line {finding.first.line}, at {finding.first.time:.6g} s"]
    elif finding.line is not None and somewhere:
        parts.append(f"in line {finding.line}")
    return " ".join(parts)


def short(value: float, digits: int = 6) -> str:
    """Return a number in few digits. What rounding alone makes, below a billionth, is 0."""
    rounded = float(f"{round(value, 9) + 0.0:.{digits}g}")
    return f"{rounded:.15g}" if abs(rounded) < 1e9 else f"{rounded:.{digits}g}"


def _plain(quantity: str) -> str:
    """Return what limits a step as a whole, in words."""
    return {"speed": "speed asked for", "time": "time asked for"}.get(quantity, quantity)
