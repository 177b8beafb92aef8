"""Does a motion stay on the drawing that it follows, and keep its speed there?"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from profileplan.checks.findings import PATH_TOLERANCE, Finding, Worst, nearness, upper, worse
from profileplan.inputs import Trace
from profileplan.motion.trajectory import Trajectory

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.geometry.shapes import Outline
    from profileplan.motion.schedule import Schedule

SPACING_SHARE = 0.25
"""Greatest distance between samples, as a share of the tolerance."""

SAG_SHARE = 1e-4
"""Greatest distance of the motion from straight lines between its samples, as such a share."""

COARSE = 1e-2
"""Least tolerance [mm] that samples along straight lines are spaced for."""

MOST_SAMPLES = 200_000
"""Most samples of an outline, and about as many of the motion along it."""


def trace_findings(schedule: Schedule) -> Iterator[Finding]:
    """Judge how near motions are to the drawings that they follow, and how fast, step by step.

    The distance is the greatest both ways, on samples: from motion to drawing and from drawing to
    motion. It counts the error with which curves of the drawing are stood for by arcs.
    """
    for index, drawn in schedule.drawn.items():
        asked, step = schedule.job.cycle.steps[index], schedule.steps[index]
        if not isinstance(asked, Trace):
            continue
        tolerance = asked.tolerance or max(map(nearness, schedule.job.machine.axes))
        apart = fastest = Worst(0.0, step.end, step.name)
        for outline, times in zip(drawn.outlines, step.tracing, strict=True):
            motion = step.trajectory.between(times.enters, times.leaves)
            time = step.start + times.enters
            far = _apart(_drawn(schedule, index, motion), outline, tolerance) + drawn.error
            apart = worse(apart, Worst(far, time, step.name))
            speed = motion.speeds(schedule.job.machine.linear).value.max()
            fastest = worse(fastest, Worst(float(speed), time, step.name))
        finding = upper(apart, "tolerance", tolerance, "mm")
        rounding = PATH_TOLERANCE + SAG_SHARE * tolerance
        yield replace(finding, ok=finding.margin >= -rounding)
        if asked.speed is not None:
            yield upper(fastest, "speed", asked.speed, "mm/s")


def _drawn(schedule: Schedule, index: int, motion: Trajectory) -> Trajectory:
    """Return a motion as seen in the drawing: x and y in plan, z above the working height.

    What the other axes do besides staying where they work is added to z, so that it counts.
    """
    machine, asked = schedule.job.machine, schedule.job.cycle.steps[index]
    names = list(machine.axis_names)
    base = np.array(schedule.positions[index])
    if isinstance(asked, Trace):
        for name, position in asked.at.items():
            base[names.index(name)] = position
    plan = [names.index(name) for name in machine.horizontal_axes[:2]]
    away = motion.coefficients.copy()
    away[:, 0] -= base
    seen = np.zeros((*away.shape[:2], 3))
    seen[:, :, : len(plan)] = motion.coefficients[:, :, plan]
    for column, name in enumerate(names):
        if column not in plan:
            seen[:, :, 2] += away[:, :, column] * (
                machine.up_sign if name == machine.up_axis else 1
            )
    return Trajectory(("x", "y", "z"), motion.durations, seen)


def _apart(motion: Trajectory, outline: Outline, tolerance: float) -> float:
    """Return the greatest distance between a motion and an outline, both ways [mm]."""
    # shapely costs more start-up than all other checks: only a drawing pays for it.
    from profileplan.geometry.deviation import deviation  # noqa: PLC0415

    # With a stop at every corner all is straight, and coarse samples tell as much.
    scale = tolerance if outline.pieces.bulge.any() else max(tolerance, COARSE)
    spacing = max(SPACING_SHARE * scale, outline.length / MOST_SAMPLES)
    speed = motion.speeds((True, True, True)).value
    _, acceleration, _, _ = motion.peaks
    bend = float(np.linalg.norm(acceleration.value))
    most = np.sqrt(8 * SAG_SHARE * scale / bend) if bend else np.inf
    parts = motion.durations * np.maximum(speed / spacing, 1 / most)
    count = np.maximum(np.ceil(parts), 1).astype(np.intp)
    piece = np.repeat(np.arange(count.size), count)
    share = (np.arange(piece.size) - (np.cumsum(count) - count)[piece]) / count[piece]
    times = motion.breaks[piece] + share * motion.durations[piece]
    points = motion.at(np.append(times, motion.duration))
    return max(deviation(points, outline.pieces, spacing=spacing))
