"""How fast are tables judged, and in how much memory?

Run by hand: ``python tests/bench/table_checks.py [ROWS]``. Writes a table of 3 axes at 4 kHz, with
positions, velocities, accelerations and a signal, and prints rows/s and the memory at its highest,
for a tenth of the rows and for all of them (default 1,000,000), beside ``numpy.loadtxt`` alone.
"""

from __future__ import annotations

import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

import profileplan as pp
from profileplan.checks.tables import check_file
from profileplan.setpoints import Content, write_table

PERIOD = 0.00025

MACHINE = pp.Machine(
    name="kiln loader",
    axes=tuple(
        pp.Axis(name, travel=(-100.0, 900.0), velocity=900.0, acceleration=4000.0, jerk=90000.0)
        for name in "xyz"
    ),
    up="+z",
    tool=pp.Tool(radius=40.0, margin=5.0),
    keepouts=(pp.Keepout("kiln car post", circle=pp.Circle(400.0, 880.0, 20.0), top=300.0),),
)


def table(folder: Path, rows: int) -> Path:
    """Write a table of about so many rows: one cycle again and again."""
    targets = [(800.0, 100.0, 400.0), (100.0, 700.0, 50.0), (0.0, 0.0, 0.0)]
    steps = [pp.Move(dict(zip("xyz", target, strict=True))) for target in targets]
    cycle = pp.Cycle(steps=(*steps, pp.Signal({"clamp": True})), start=dict.fromkeys("xyz", 0.0))
    plan = pp.plan(MACHINE, cycle)
    file = folder / "one.csv"
    write_table(plan, file, content=Content(("pos", "vel", "acc"), period=PERIOD))
    head, *lines = file.read_text(encoding="utf-8").splitlines()
    # The cycle ends where it begins, so its last row is the first of the next.
    cells = [line.partition(",")[2] for line in lines[:-1]]
    whole = folder / "table.csv"
    with whole.open("w", encoding="utf-8", newline="") as stream:
        stream.write(head + "\n")
        for start in range(0, rows, len(cells)):
            times = ((start + index) * PERIOD for index in range(len(cells)))
            stream.writelines(f"{at:.5f},{row}\n" for at, row in zip(times, cells, strict=True))
        stream.write(f"{(start + len(cells)) * PERIOD:.5f},{cells[0]}\n")
    return whole


def judge(file: Path) -> None:
    """Judge a table and print the time and the memory at its highest."""
    begin = time.perf_counter()
    findings = check_file(file, MACHINE)
    taken = time.perf_counter() - begin
    most = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    failed = [f.check for f in findings if not f.ok]
    print(f"judged in {taken:.1f} s, {most:.0f} MB at most; not met: {failed or 'nothing'}")


def main(rows: int) -> None:
    """Print everything."""
    with tempfile.TemporaryDirectory() as folder:
        for count in (rows // 10, rows):
            file = table(Path(folder), count)
            with file.open("rb") as stream:
                lines = sum(1 for _ in stream) - 1
            begin = time.perf_counter()
            with file.open(encoding="utf-8") as stream:
                next(stream)
                while len(np.loadtxt(stream, delimiter=",", max_rows=20_000, ndmin=2)) == 20_000:
                    pass
            bare = time.perf_counter() - begin
            print(f"{lines} rows, {file.stat().st_size / 1e6:.0f} MB; loadtxt alone {bare:.1f} s")
            begin = time.perf_counter()
            subprocess.run([sys.executable, __file__, "--judge", str(file)], check=True)
            print(f"  {lines / (time.perf_counter() - begin):,.0f} rows/s with start-up")


if __name__ == "__main__":
    if sys.argv[1:2] == ["--judge"]:
        judge(Path(sys.argv[2]))
    else:
        main(int(sys.argv[1]) if sys.argv[1:] else 1_000_000)
