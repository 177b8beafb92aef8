"""What does writing setpoint tables cost, beside other writers, and does memory grow with length?

Run by hand: ``python tests/bench/setpoints.py [HOURS]``. Prints rows/s of writers of the same
table, in turn in one run; those of other libraries where they are installed (polars, pyarrow,
pandas). Then the memory at its highest for tables of growing length, each in a process of its own,
the longest of HOURS (default 0.25) of three axes at 4 kHz.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import tempfile
import time
from functools import partial
from importlib import import_module
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

import profileplan as pp
from profileplan import setpoints
from profileplan.setpoints import digits, pace

if TYPE_CHECKING:
    from collections.abc import Callable

    from profileplan.motion.polynomials import Array

PERIOD = 0.00025
DECIMALS = 6
RUNS = 9
SECONDS = 125
CONTENT = setpoints.Content(tuple(setpoints.COLUMNS), period=PERIOD)


def cycle_of(duration: float) -> pp.Plan:
    """Return a plan of three axes that move to and fro for about a duration [s]."""
    axes = tuple(
        pp.Axis(name, travel=(-900.0, 900.0), velocity=800.0, acceleration=4000.0, jerk=6e4)
        for name in "xyz"
    )
    there, back = {"x": 700.0, "y": -400.0, "z": 90.0}, {"x": -600.0, "y": 300.0, "z": -20.0}
    start = dict.fromkeys("xyz", 0.0)
    machine = pp.Machine(name="bench", axes=axes)
    pair = (pp.Move(there), pp.Move(back))
    one = pp.plan(machine, pp.Cycle(steps=pair * 2, start=start))
    lap = one.steps[3].end - one.steps[1].end
    return pp.plan(machine, pp.Cycle(steps=pair * max(int(duration / lap), 1), start=start))


def table_of(plan: pp.Plan) -> Array:
    """Return time, and position, velocity, acceleration and jerk of each axis: (n, 13)."""
    table = setpoints.sample(plan, period=PERIOD)
    parts = [table.time[:, np.newaxis], table.position]
    parts += [part for part in (table.velocity, table.acceleration, table.jerk) if part is not None]
    return np.concatenate(parts, axis=1)


Writer: TypeAlias = "Callable[[Path], object]"


def own(numbers: Array) -> Writer:
    """Write by lookup of digits, on as many threads as the tables."""
    cells = [digits.Cell(b"," if column else b"", DECIMALS) for column in range(numbers.shape[1])]
    columns = [np.ascontiguousarray(column) for column in numbers.T]

    def text(rows: range) -> bytes:
        return digits.text([column[rows.start : rows.stop] for column in columns], cells, b"\n")

    def write(file: Path) -> None:
        with file.open("wb") as stream:
            for part in pace.in_order(text, pace.blocks(range(len(numbers)))):
                stream.write(part)

    return write


def by_polars(numbers: Array) -> Writer:
    """Write with polars."""
    frame = import_module("polars").DataFrame(numbers)
    return partial(frame.write_csv, include_header=False, float_precision=DECIMALS)


def by_pyarrow(numbers: Array) -> Writer:
    """Write with pyarrow, which knows no number of decimals: all digits of each number."""
    arrow, writer = import_module("pyarrow"), import_module("pyarrow.csv")
    names = [str(column) for column in range(numbers.shape[1])]
    table = arrow.table([np.ascontiguousarray(column) for column in numbers.T], names=names)
    options = writer.WriteOptions(include_header=False)
    return lambda file: writer.write_csv(table, file, options)


def by_pandas(numbers: Array) -> Writer:
    """Write with pandas."""
    frame = import_module("pandas").DataFrame(numbers)
    return partial(frame.to_csv, header=False, index=False, float_format=f"%.{DECIMALS}f")


def by_numpy(numbers: Array) -> Writer:
    """Write with numpy."""
    return lambda file: np.savetxt(file, numbers, fmt=f"%.{DECIMALS}f", delimiter=",")


WRITERS: dict[str, tuple[Callable[[Array], Writer], str | None]] = {
    "own": (own, None),
    "polars": (by_polars, "polars"),
    "pyarrow": (by_pyarrow, "pyarrow"),
    "pandas": (by_pandas, "pandas"),
    "numpy.savetxt": (by_numpy, None),
}
"""Writer → what makes it of a table, each in the form that it likes best, and its library."""

QUICK = ("own", "polars", "pyarrow")
"""Writers that get the whole table; the others get a part of it."""


def rates(plan: pp.Plan, folder: Path) -> None:
    """Print rows/s of all writers, and of sampling and writing together."""
    numbers = table_of(plan)
    # Others write what rounds to zero from below with a sign.
    numbers[np.abs(numbers) <= 0.5 * 10.0**-DECIMALS] = 0.0
    print(f"{len(numbers)} rows of {numbers.shape[1]} columns, rows/s, median of {RUNS} in turn")
    parts = {name: numbers if name in QUICK else numbers[:50_000] for name in WRITERS}
    ready = {
        name: make(parts[name])
        for name, (make, library) in WRITERS.items()
        if library is None or find_spec(library)
    }
    taken: dict[str, list[float]] = {name: [] for name in ready}
    for _ in range(RUNS):
        for name, write in ready.items():
            start = time.perf_counter()
            write(folder / name)
            taken[name].append(time.perf_counter() - start)
    for name, durations in taken.items():
        print(f"  {name:30} {len(parts[name]) / statistics.median(durations):12,.0f}")
    if "polars" in taken:
        ratio = statistics.median(
            other / one for one, other in zip(taken["own"], taken["polars"], strict=True)
        )
        same = (folder / "own").read_bytes() == (folder / "polars").read_bytes()
        print(f"  own over polars {ratio:.2f}; {'the same bytes' if same else 'bytes differ'}")
    sampler = setpoints.sampling.Sampler(plan, period=PERIOD)
    start = time.perf_counter()
    for rows in pace.blocks(range(sampler.count)):
        sampler.table(rows)
    rate = sampler.count / (time.perf_counter() - start)
    print(f"  {'sampling alone, one thread':30} {rate:12,.0f}")
    start = time.perf_counter()
    setpoints.write_table(plan, folder / "table", content=CONTENT)
    rate = sampler.count / (time.perf_counter() - start)
    print(f"  {'sampling and writing to disk':30} {rate:12,.0f}")


def highest(duration: float, folder: str) -> None:
    """Write the table of a plan of a duration [s]; print rows, seconds and the highest memory."""
    import resource  # noqa: PLC0415 - not everywhere

    plan = cycle_of(duration)
    _ = plan.trajectory
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    start = time.perf_counter()
    content = setpoints.Content(period=PERIOD)
    rows = setpoints.write_table(plan, Path(folder) / "long.csv", content=content)[0].rows
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(
        f"  {rows:12,} rows of 10 columns {time.perf_counter() - start:8.1f} s"
        f" {after:6.0f} MB ({before:.0f} MB with the plan)",
        flush=True,
    )


def main() -> None:
    """Print rates, then memory against length."""
    if sys.argv[1:2] == ["--highest"]:
        highest(float(sys.argv[2]), sys.argv[3])
        return
    hours = float(sys.argv[1]) if len(sys.argv) > 1 else 0.25
    with tempfile.TemporaryDirectory() as folder:
        # First, for a process is begun with the highest memory of the one that begins it.
        print("memory at its highest")
        for share in (0.01, 0.1, 1.0):
            duration = str(share * hours * 3600)
            subprocess.run([sys.executable, __file__, "--highest", duration, folder], check=True)
        rates(cycle_of(SECONDS), Path(folder))


if __name__ == "__main__":
    main()
