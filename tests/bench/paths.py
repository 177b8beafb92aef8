"""How short are motions inside a tolerance, and what does the search cost?

Run by hand: ``python tests/bench/paths.py [SEGMENTS ...]``. Prints, for published problems, the
duration over the best known one inside the tolerance, over the best timing of symmetric corner
blends and over stops at every point, and the time of planning over that of the motion. Then the
growth with the number of segments (100 and 1000, or as given), with the memory at its highest.
"""

from __future__ import annotations

import json
import resource
import sys
import time
from pathlib import Path

import numpy as np

import profileplan as pp

PROBLEMS = Path(__file__).parents[1] / "published" / "path-problems.json"
AXES = "xyz"


def planned(problem: dict[str, list[float]], points: list[list[float]]) -> tuple[pp.Plan, float]:
    """Return the plan of a problem through points, and how long planning took [s]."""
    low, high = np.min(points, axis=0) - 100.0, np.max(points, axis=0) + 100.0
    axes = tuple(
        pp.Axis(
            AXES[column],
            travel=(float(low[column]), float(high[column])),
            velocity=problem["velocity_mm_s"][column],
            acceleration=problem["acceleration_mm_s2"][column],
            jerk=problem["jerk_mm_s3"][column],
        )
        for column in range(len(points[0]))
    )
    named = [dict(zip(AXES, map(float, point), strict=False)) for point in points]
    step = pp.PathStep(
        tuple(pp.Waypoint(point) for point in named[1:]),
        tolerance=float(problem["tolerance_mm"]),  # type: ignore[arg-type]
        speed=problem["speed_mm_s"],  # type: ignore[arg-type]
    )
    cycle = pp.Cycle(steps=(step,), start=named[0])
    machine = pp.Machine(name="bench", axes=axes)
    start = time.perf_counter()
    plan = pp.plan(machine, cycle)
    return plan, time.perf_counter() - start


def wave(count: int) -> list[list[float]]:
    """Return chords of a wave: neighbours turn by a little."""
    index = np.arange(count + 1)
    return [[22.5 * float(i), 120 * float(np.sin(2 * np.pi * i / 20))] for i in index]


def main() -> None:
    """Print the tables."""
    problems = json.loads(PROBLEMS.read_text(encoding="utf-8"))
    print(
        f"{'problem':18} {'/best':>7} {'/blend':>7} {'/stops':>7} {'plan/motion':>12} {'bound':>6}"
    )
    for problem in problems:
        plan, taken = planned(problem, problem["points_mm"])
        ratios = [
            plan.duration / problem[key] if problem[key] else float("nan")
            for key in ("best_in_tolerance_s", "best_known_s", "stop_at_every_point_s")
        ]
        bound = (plan.steps[0].least_time or 0.0) / plan.duration
        row = " ".join(f"{ratio:7.4f}" for ratio in ratios)
        print(f"{problem['name']:18} {row} {taken / plan.duration:12.2f} {bound:6.2f}")
    wavy = next(problem for problem in problems if problem["name"] == "s-path-1")
    before: tuple[int, float] | None = None
    for count in [int(word) for word in sys.argv[1:]] or [100, 1000]:
        plan, taken = planned(wavy, wave(count))
        memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
        growth = ""
        if before:
            exponent = np.log(taken / before[1]) / np.log(count / before[0])
            growth = f", exponent {exponent:.2f}"
        met = all(finding.ok for finding in plan.check())
        print(
            f"{count} chords: planning / motion {taken / plan.duration:.2f}{growth}, "
            f"{memory:.0f} MB at most, requirements {'met' if met else 'NOT MET'}"
        )
        before = (count, taken)


if __name__ == "__main__":
    main()
