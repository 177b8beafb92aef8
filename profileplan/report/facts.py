"""What must be seen first: is it possible, how long does it take, how near is it to its limits?"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

from profileplan import wording
from profileplan.checks.findings import MOTOR_CHECKS

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.checks import Finding
    from profileplan.results import PlannedCycle

SHORT = 0.0095
"""Times below would be a few milliseconds."""


class Tile(NamedTuple):
    """A fact of the first screen: heading, number, a line below, "good", "bad" or "" with its sign.

    ``share`` of what is allowed, None where there is none; ``bar`` is it in percent, at most 100.
    """

    head: str
    figure: str
    text: str
    state: str = ""
    share: float | None = None

    @property
    def sign(self) -> str:
        """What tells of the state without colour."""
        return {"good": "✓", "bad": "✕"}.get(self.state, "")

    @property
    def bar(self) -> float:
        """The share in percent, at most 100."""
        return min(100 * (self.share or 0.0), 100.0)


def tiles(planned: PlannedCycle) -> Iterator[Tile]:
    """Yield the facts of the first screen."""
    findings = planned.check()
    failed = [finding for finding in findings if not finding.ok]
    if failed:
        yield Tile(
            "Can it be done?",
            f"No: {len(failed)} of {len(findings)} not met",
            "; ".join(wording.required(finding) for finding in failed[:3]),
            "bad",
        )
    else:
        yield Tile("Can it be done?", "Yes", wording.requirements(findings), "good")
    yield _time(planned)
    yield _held(planned)
    yield _clearance(findings)
    yield _motor(findings)


def _seconds(time: float) -> str:
    """Return a time to the millisecond, and a short one in four digits."""
    return f"{time:.3f} s" if time >= SHORT else f"{time:.4g} s"


def _time(planned: PlannedCycle) -> Tile:
    figure, target = _seconds(planned.duration), planned.target
    if target is None:
        return Tile("Cycle time", figure, "no target given")
    apart = _seconds(abs(target - planned.duration))
    told = f"{apart} to spare" if planned.meets_target else f"{apart} too long"
    share = planned.duration / target
    state = "good" if planned.meets_target else "bad"
    return Tile(
        "Cycle time",
        figure,
        f"target {target:g} s, {told} ({100 * share:.1f} % of it)",
        state,
        share,
    )


def _held(planned: PlannedCycle) -> Tile:
    levers = [own for own in planned.levers if own.limit.quantity != "time"]
    if not levers:
        return Tile("What limits it", "times asked for", "no limit holds a step back")
    first = levers[0]
    share = first.limit.saves / planned.duration if planned.duration else 0.0
    return Tile(
        "What limits it",
        wording.lever(first.limit),
        f"10 % more would save {_seconds(first.limit.saves)} ({100 * share:.1f} % of the cycle)",
    )


def _clearance(findings: Sequence[Finding]) -> Tile:
    head = "Smallest clearance"
    finding = next((own for own in findings if own.check == "clearance"), None)
    if finding is None:
        return Tile(head, "not judged", "the machine file has no keep-outs")
    margin = wording.short(round(finding.margin, 6), 3)
    told = (
        f"{wording.short(finding.limit, 4)} mm kept, margin {margin} mm; "
        f"{finding.what}, {wording.at(finding)}"
    )
    return Tile(
        head, f"{wording.short(finding.value, 4)} mm", told, "good" if finding.ok else "bad"
    )


def _motor(findings: Sequence[Finding]) -> Tile:
    head = "Tightest motor"
    motors = [own for own in findings if own.check in MOTOR_CHECKS and own.use is not None]
    if not motors:
        return Tile(head, "not judged", "the machine file says nothing of motors")
    worst = max(motors, key=lambda own: own.use or 0.0)
    told = (
        f"{wording.required(worst)}: {wording.short(worst.value, 4)} of "
        f"{wording.short(worst.limit, 4)} {worst.unit}, margin {wording.short(worst.margin, 3)}"
    )
    share = worst.use or 0.0
    return Tile(head, f"{100 * share:.0f} %", told, "good" if worst.ok else "bad", share)
