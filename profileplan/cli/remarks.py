"""What is said on stderr of a plan and of a table that was written, beside the results?"""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import click

from profileplan import wording
from profileplan.cli import tables

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from profileplan.checks import Finding
    from profileplan.inputs import Axis, Drive, Job
    from profileplan.planning import Plan
    from profileplan.setpoints import Noise, Part, PvtTable

PEAK_TOLERANCE = 1e-5
"""Share of a limit that cubics may pass it by unsaid, if rounding explains it: where points can be
found that need no more than that, they are taken."""

PARTS_TOLD = 3
"""Parts that begin in motion that are named; of more the number is told."""


def tell_amiss(findings: Sequence[Finding]) -> None:
    """Say on stderr what is not met, but for the target, which the verdict tells."""
    for line in wording.all_amiss(findings):
        click.echo(f"{tables.bad('NOT MET')}: {line}", err=True)


def tell_unplayed(planned: Plan, period: float | None) -> None:
    """Say on stderr which signals change back before a row shows them."""
    from profileplan import setpoints  # noqa: PLC0415

    for event in setpoints.unplayed(planned, period):
        state = "on" if event.state else "off"
        click.echo(
            f"note: {event.signal} goes {state} at {event.time:.6f} s and changes again before "
            "the next row: the table does not show it",
            err=True,
        )


def tell_joins(parts: Sequence[Part]) -> None:
    """Say on stderr which parts begin while the axes move."""
    moving = [part for part in parts if part.axis == parts[0].axis and not part.starts_at_rest]
    for part in moving[:PARTS_TOLD]:
        click.echo(f"note: {part.file.name} {part.joins}", err=True)
    if len(moving) > PARTS_TOLD:
        click.echo(f"note: … and {len(moving) - PARTS_TOLD} more parts in motion", err=True)


def part_values(part: Part) -> dict[str, object]:
    """Return what JSON has of a file."""
    return {
        "file": str(part.file),
        "axis": part.axis or None,
        "first_row": part.first,
        "rows": part.rows,
        "starts_at_rest": part.starts_at_rest,
    }


def tell_turns(planned: Plan, drives: Mapping[str, Drive], period: float) -> None:
    """Say on stderr which wrapped axes may turn so far that no one can tell which way."""
    from profileplan import setpoints  # noqa: PLC0415

    for turn in setpoints.doubtful_turns(planned, drives, period):
        click.echo(
            f"note: {turn.name} turns by up to {turn.angle:.4g} deg between two rows, half of its "
            f"wrap of {turn.wrap:g} or more: its sense is in doubt; take a period below "
            f"{turn.longest:.2g} s",
            err=True,
        )


def tell_noise(noises: Sequence[Noise]) -> None:
    """Say on stderr where rounding is large against a limit, and what makes it small.

    Of each axis the loudest quantity is told.
    """
    loudest: dict[str, Noise] = {}
    for noise in noises:
        other = loudest.get(noise.axis)
        if noise.advice is not None and (other is None or _share(other) < _share(noise)):
            loudest[noise.axis] = noise
    for noise in loudest.values():
        click.echo(
            f"note: {noise.axis} {noise.quantity}: from these positions a drive derives up to "
            f"{noise.derived:.3g}, from exact ones {noise.exact:.3g}, the limit is "
            f"{noise.limit:.3g}; {noise.advice}",
            err=True,
        )


def noise_values(noise: Noise) -> dict[str, object]:
    """Return what JSON has of what rounding does."""
    return {
        "axis": noise.axis,
        "quantity": noise.quantity,
        "limit": noise.limit,
        "exact": noise.exact,
        "derived": noise.derived,
        "rounding": noise.rounding,
        "time_s": noise.time,
        "ok": noise.ok,
    }


def _share(noise: Noise) -> float:
    return noise.rounding / noise.limit


def tell_peaks(found: PvtTable, place: int, axis: Axis) -> None:
    """Say on stderr which limit of an axis the cubics between points pass by most, if any."""
    broken = [name for name, axes in found.broken.items() if axes[place]]
    worst = max(broken or found.excess, key=lambda name: float(found.excess[name][place]))
    share, explained = found.excess[worst][place], found.explained[worst][place]
    if not broken and share <= PEAK_TOLERANCE:
        return
    reached = f"leave it by {100 * share:.2g} % of its length"
    if worst in found.peaks:
        limit = axis.limits._asdict()[worst]
        reached = f"reach {found.peaks[worst][place]:.6g}, {100 * share:.2g} % over {limit:g}"
    steps = "increments" if axis.name in found.content.drives else "steps"
    steps = f"rounding, of positions to {steps} of {2 * found.rounding[place]:.3g} {axis.unit},"
    if not broken:
        verdict = f"{steps} explains it: finer steps make it less"
    elif not found.on_ticks:
        verdict = (
            f"the limit is not kept; {steps} explains up to {100 * explained:.2g} %: take finer "
            "ones, or a greater --error, so that points are farther apart"
        )
    else:
        verdict = (
            f"the limit is not kept; {steps} explains {100 * explained:.2g} %. Points off ticks "
            "keep it: leave out --period and --interpolation, and tell the time in s, ms or us"
        )
    click.echo(
        f"note: {axis.name} {worst}: between points the drive's cubics {reached}; {verdict}",
        err=True,
    )


def tell_leaps(found: PvtTable, place: int, axis: Axis, period: float) -> None:
    """Say on stderr where an acceleration leaps by more than the jerk limit allows in a tick."""
    leap = float(found.leaps[place])
    if axis.jerk is not None and leap > axis.jerk * period:
        click.echo(
            f"note: {axis.name} jerk: where cubics meet the acceleration leaps by up to "
            f"{leap:.4g} {axis.unit}/s²; played in a tick of {period:g} s that is "
            f"{leap / period / axis.jerk:.2g} times the jerk limit: a smaller --error makes it "
            "less",
            err=True,
        )


def tell_lost(planned: Plan, found: PvtTable) -> None:
    """Say on stderr which signals change back before a point shows them."""
    if found.on_ticks:
        tell_unplayed(planned, found.tick)
        return
    for name in planned.signals:
        times = [event.time for event in planned.events if event.signal == name]
        lost = sum(after - before < found.tick for before, after in pairwise(times))
        if lost:
            click.echo(
                f"note: {name} changes and changes back at once, {lost} times: the table does "
                "not show it",
                err=True,
            )


def distance(found: PvtTable, job: Job) -> str:
    """Return how far the cubics are from the plan, of the axis that is farthest."""
    worst = int(found.error.argmax())
    axis = job.machine.axes[worst]
    return (
        f"at most {found.error[worst]:.3g} {axis.unit} off the plan, {axis.name}, of which "
        f"rounding up to {found.rounding[worst]:.2g}"
    )


def distances(found: PvtTable) -> dict[str, object]:
    """Return what JSON has of the cubics between points."""
    return {
        "error": dict(zip(found.axes, found.error.tolist(), strict=True)),
        "rounding_share": dict(zip(found.axes, found.rounding.tolist(), strict=True)),
        "limits_kept": found.kept,
        "cubics": {
            axis: {quantity: float(values[place]) for quantity, values in found.peaks.items()}
            | {
                "leap": float(found.leaps[place]),
                "over_limit": {name: float(own[place]) for name, own in found.excess.items()},
                "explained": {name: float(own[place]) for name, own in found.explained.items()},
                "kept": not any(own[place] for own in found.broken.values()),
            }
            for place, axis in enumerate(found.axes)
        },
    }
