"""How are results laid out: tables fitted to the terminal, verdicts in words and colour?"""

from __future__ import annotations

import shutil
from typing import TYPE_CHECKING

import click

from profileplan import wording

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.checks import Finding
    from profileplan.planning import Plan, PlannedStep

NARROW, WIDE = 60, 160
"""Fewest and most columns that tables are fitted to."""


def step_table(planned: Plan) -> str:
    """Return the table of steps: when, how long, what limits each, the use of each limit.

    Of a cycle with parts it has the first part and the slowest, and the steps of no part.
    """
    from profileplan.summary import uses  # noqa: PLC0415

    left_out = _left_out(planned)

    uses_of = [f"{word} %" for word in wording.SHORT.values()]
    heads = ["#", "step", "kind", "start s", "time s", "limited by", *uses_of]
    rows = []
    for number, step in enumerate(planned.steps, start=1):
        if number - 1 in left_out:
            continue
        shares = [wording.most(by_axis) for by_axis in uses(planned, step).values()]
        times = [f"{step.start:.3f}", f"{step.duration:.3f}"]
        rows.append([str(number), step.name, step.kind, *times, wording.held(step), *shares])
    shown = table(heads, rows, text=("step", "kind", "limited by"))
    if not left_out:
        return shown
    count = f"{len(left_out)} row{'s' if len(left_out) > 1 else ''}"
    return f"{shown}\n{count} of other parts left out; --json has all"


def parts(planned: Plan) -> str:
    """Return in a line how long the parts of a cycle take; nothing where it has none."""
    from profileplan.summary import mean_duration, part_times, slowest  # noqa: PLC0415

    times = part_times(planned)
    if not times:
        return ""
    if len(times) == 1:
        return f"1 part, {times[0].duration:.3f} s"
    worst = slowest(times)
    return (
        f"{len(times)} parts, {mean_duration(times):.3f} s each on average; "
        f"slowest: {worst.part.name}, {worst.duration:.3f} s"
    )


def levers(planned: Plan) -> str:
    """Return what would shorten the cycle, and the steps by the time that they take."""
    heads = ["what limits", "saved by 10 % more, s", "steps that it limits"]
    rows = [
        [wording.lever(lever.limit), f"{lever.limit.saves:.3f}", _named(planned, lever.steps)]
        for lever in planned.levers
        if lever.limit.quantity != "time"
    ]
    longest = sorted(planned.steps, key=lambda step: -step.duration)[:5]
    asked = sum(step.duration for step in planned.steps if _asks_for_time(step))
    lines = []
    if rows:
        shown = table(heads, rows, text=(heads[0], heads[2]))
        lines = ["", "What would shorten the cycle:", "", shown]
    if asked:
        lines.append(f"\nWaits and times asked for take {asked:.3f} s.")
    names = "; ".join(f"{step.name} {step.duration:.3f} s" for step in longest if step.duration)
    lines.append(click.wrap_text(f"Longest steps: {names}.", width=width()))
    return "\n".join(lines)


def findings_table(findings: Sequence[Finding]) -> str:
    """Return the table of requirements, with value, limit and margin."""
    heads = [*wording.REQUIREMENT, "met"]
    rows = [[*wording.requirement(finding), _met(finding)] for finding in findings]
    return table(heads, rows, text=("requirement", "unit", "where", "met"))


def table(heads: Sequence[str], rows: Sequence[Sequence[str]], *, text: Sequence[str]) -> str:
    """Return a table fitted to the terminal: columns of text are wrapped, numbers never."""
    import tabulate  # noqa: PLC0415

    tabulate.MIN_PADDING = 0  # of headings: they need no more room than numbers do

    widths = [
        max(len(click.unstyle(cell)) for cell in (head, *column))
        for head, *column in zip(heads, *rows, strict=True)
    ]
    flexible = [index for index, head in enumerate(heads) if head in text]
    spare = width() - sum(widths) - 2 * (len(heads) - 1)
    while spare < 0 and any(widths[index] > 8 for index in flexible):
        widest = max(flexible, key=lambda index: widths[index])
        widths[widest] -= 1
        spare += 1
    return tabulate.tabulate(
        rows,
        heads,
        tablefmt="simple",
        disable_numparse=True,
        colalign=["left" if head in text else "right" for head in heads],
        maxcolwidths=[widths[index] if index in flexible else None for index in range(len(heads))],
    )


def width() -> int:
    """Return how many columns a table may have."""
    return min(max(shutil.get_terminal_size((100, 24)).columns, NARROW), WIDE)


def verdict(planned: Plan) -> str:
    """Return the cycle time, and whether it meets its target, in colour."""
    return wording.verdict(planned, good=good, bad=bad)


def requirements(findings: Sequence[Finding]) -> str:
    """Return in a line whether all requirements are met, in colour."""
    return wording.requirements(findings, good=good, bad=bad)


def good(word: str) -> str:
    """Return a word as one that tells of something well."""
    return click.style(word, fg="green")


def bad(word: str) -> str:
    """Return a word as one that tells of something amiss."""
    return click.style(word, fg="red", bold=True)


def _left_out(planned: Plan) -> set[int]:
    """Return the steps of parts that are neither the first nor the slowest, counted from 0."""
    from profileplan.summary import part_times, slowest  # noqa: PLC0415

    times = part_times(planned)
    kept = (times[0].part, slowest(times).part) if times else ()
    return {
        index
        for time in times
        if time.part not in kept
        for index in range(time.part.first, time.part.last + 1)
    }


def _named(planned: Plan, steps: Sequence[str]) -> str:
    """Return names of steps in a row, the first few where parts repeat them."""
    return wording.listed(steps) if planned.job.cycle.parts else "; ".join(steps)


def _asks_for_time(step: PlannedStep) -> bool:
    return any(limit.quantity == "time" for limit in step.limited_by)


def _met(finding: Finding) -> str:
    """Return whether a requirement is met; "?" where the table is too coarse to tell."""
    if not finding.decided:
        return "?"
    return good("yes") if finding.ok else bad("NO")
