"""How fast is it? Prints ratios, each of two things measured in turn in one run.

Run by hand: ``python tests/bench``. The machine's speed drifts, so compare ratios, never times.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from profileplan.motion.laws import Limits, solve_trapezoidal

if TYPE_CHECKING:
    from collections.abc import Callable

ROOT = Path(__file__).parents[2]
RUNS = 15

BARE_CLICK = """
import click

@click.group()
def cli():
    "A bare program."

@cli.command()
@click.argument("source")
def plan(source):
    "Plan."

cli()
"""


def seconds(task: Callable[[], object]) -> float:
    """Return how long a task takes [s]."""
    start = time.perf_counter()
    task()
    return time.perf_counter() - start


def ratio(task: Callable[[], object], yardstick: Callable[[], object], runs: int = RUNS) -> str:
    """Return the ratios of two tasks' durations, run in turn: median, least and greatest."""
    task()
    yardstick()
    pairs = [(seconds(task), seconds(yardstick)) for _ in range(runs)]
    ratios = [one / other for one, other in pairs]
    one, other = (1000 * statistics.median(column) for column in zip(*pairs, strict=True))
    return (
        f"{statistics.median(ratios):6.2f}  ({min(ratios):.2f} to {max(ratios):.2f}; "
        f"{one:.0f} ms over {other:.0f} ms)"
    )


def command(*words: str) -> Callable[[], object]:
    """Return a task that runs Python with arguments, in a process of its own."""
    return lambda: subprocess.run([sys.executable, *words], check=True, capture_output=True)


def batch() -> tuple[Callable[[], object], Callable[[], object]]:
    """Return a million rest-to-rest moves, and a square and a cube root of as many numbers."""
    random = np.random.default_rng(7)
    distance = 10.0 ** random.uniform(-2, 4, 1_000_000)
    limits = Limits(1000.0, 6000.0, 5000.0, 80000.0)
    return (
        lambda: solve_trapezoidal(distance, limits),
        lambda: (np.sqrt(distance), np.cbrt(distance)),
    )


def main() -> None:
    """Print a line for each aim."""
    with tempfile.TemporaryDirectory() as folder:
        bare = Path(folder) / "bare.py"
        bare.write_text(BARE_CLICK)
        start_up = ratio(command("-m", "profileplan", "--help"), command(str(bare), "--help"))
        print(f"start-up over a bare click program         {start_up}  aim 1.5")
        job = str(ROOT / "samples/kiln-loader/cycle.toml")
        table = str(Path(folder) / "setpoints.csv")
        sample = ratio(
            command("-m", "profileplan", "export", job, "-o", table), command("-c", "import numpy")
        )
        print(f"plan and export of a sample / import numpy {sample}  aim 3")
    print(f"a million moves over sqrt and cbrt         {ratio(*batch(), runs=7)}  aim 60")


if __name__ == "__main__":
    main()
