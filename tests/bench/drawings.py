"""What do reading drawings, building corridors and tracing cost?

Run by hand: ``python tests/bench/drawings.py [VERTICES ...]``. Prints, for drawings of 10^3 to 10^6
vertices (or as given), the time of reading, chaining and building the corridor over that of
``ezdxf.readfile`` alone, with the growth; then planning a smooth outline of 10^5 vertices over the
motion's own duration, and the memory at its highest.
"""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from pathlib import Path

import ezdxf.filemanagement as dxf
import numpy as np

import profileplan as pp
from profileplan.geometry.drawing import read_drawing
from profileplan.geometry.outlines import chain
from profileplan.geometry.sleeve import sleeve

TOLERANCE = 0.05
SMOOTH = 100_000


def loops(count: int) -> np.ndarray:
    """Return points of a smooth closed curve of 13 m in 700 x 500 mm: (count, 2)."""
    turn = 2 * np.pi * np.arange(count) / count
    return np.column_stack([400 + 350 * np.sin(7 * turn), 300 + 250 * np.sin(8 * turn + 0.5)])


def write(folder: Path, count: int, *, mixed: bool) -> Path:
    """Write the curve as one polyline, or as lines in a mixed order and direction."""
    points = loops(count)
    document = dxf.new("R2010")
    document.units = 4
    space = document.modelspace()
    if mixed:
        ends = np.stack([points, np.roll(points, -1, axis=0)], axis=1)
        random = np.random.default_rng(1)
        turned = random.random(count) < 0.5
        ends[turned] = ends[turned, ::-1]
        for start, end in ends[random.permutation(count)].tolist():
            space.add_line(start, end)
    else:
        # Point by point the polyline would be copied each time.
        packed = np.column_stack([points, np.zeros((count, 3))])
        space.add_lwpolyline([], close=True).lwpoints.values = packed
    file = folder / f"{count}{'mixed' if mixed else ''}.dxf"
    document.saveas(file)
    return file


def timed(file: Path) -> tuple[float, list[float], int]:
    """Return the time of ezdxf alone, those of the stages here [s], and the legs found."""
    start = time.perf_counter()
    dxf.readfile(file)
    alone = time.perf_counter() - start
    marks = [time.perf_counter()]
    drawing = read_drawing(file)
    marks.append(time.perf_counter())
    chained = chain(drawing.pieces, [entity.layer for entity in drawing.entities])
    marks.append(time.perf_counter())
    legs = sum(len(sleeve(own.pieces, tolerance=TOLERANCE).radius) for own in chained.outlines)
    marks.append(time.perf_counter())
    return alone, np.diff(marks).tolist(), legs


def main() -> None:
    """Print the tables."""
    counts = [int(float(word)) for word in sys.argv[1:]] or [10**3, 10**4, 10**5, 10**6]
    with tempfile.TemporaryDirectory() as name:
        head = f"{'drawing':14} {'vertices':>9} {'ezdxf s':>8} {'read':>6} {'chain':>6}"
        print(f"{head} {'legs':>6} {'all':>6}   (over ezdxf alone)")
        for count in counts:
            for mixed in (False, True)[: 1 if count > SMOOTH else 2]:
                alone, stages, legs = timed(write(Path(name), count, mixed=mixed))
                row = " ".join(f"{stage / alone:6.2f}" for stage in (*stages, sum(stages)))
                kind = "lines, mixed" if mixed else "one polyline"
                print(f"{kind:14} {count:9} {alone:8.2f} {row}   {legs} legs")
        file = write(Path(name), SMOOTH, mixed=False)
        axes = tuple(
            pp.Axis(axis, travel=(0, 1000), velocity=500, acceleration=3000, jerk=60000)
            for axis in "xy"
        )
        for speed in (200.0, None):
            step = pp.Trace(file, tolerance=TOLERANCE, speed=speed)
            cycle = pp.Cycle(steps=(step,), start={"x": 0.0, "y": 0.0})
            start = time.perf_counter()
            plan = pp.plan(pp.Machine(name="bench", axes=axes), cycle)
            taken = time.perf_counter() - start
            met = all(finding.ok for finding in plan.check())
            told = "no speed limit" if speed is None else f"{speed:g} mm/s"
            print(
                f"{SMOOTH} vertices, {told}: planning / motion {taken / plan.duration:.2f}, "
                f"requirements {'met' if met else 'NOT MET'}"
            )
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{memory:.0f} MB at most")


if __name__ == "__main__":
    main()
