"""Plans random cycles of mixed steps and judges each: ``python tests/bench/random_jobs.py 10000``.

No cycle may break a limit, raise anything but this project's own errors, or give a table whose
differences break a limit. The tests run the first few hundred of the same cycles.
"""

from __future__ import annotations

import sys
import time
from collections import Counter
from typing import TYPE_CHECKING, Literal

import numpy as np

import profileplan as pp
from profileplan.inputs import LAW_NAMES

if TYPE_CHECKING:
    from profileplan.inputs import Step

NAMES = "xyzabcuvw"
ARRIVALS: tuple[Literal["together", "earliest"], ...] = ("together", "earliest")


def random_machine(random: np.random.Generator) -> pp.Machine:
    """Return a machine of one to five axes whose limits span the decades of real ones."""
    axes = []
    for name in NAMES[: random.integers(1, 6)]:
        rotary = bool(random.random() < 0.2)
        span = 10 ** random.uniform(1, 3.7)
        low = random.uniform(-span, 0.0)
        acceleration = 10 ** random.uniform(2, 4.7)
        axes.append(
            pp.Axis(
                name,
                kind="rotary" if rotary else "linear",
                travel=(low, low + span),
                velocity=10 ** random.uniform(1, 3.7),
                acceleration=acceleration,
                deceleration=acceleration * random.choice([0.1, 0.8, 1.0, 3.0]),
                jerk=None if random.random() < 0.3 else acceleration * 10 ** random.uniform(0, 3),
            )
        )
    return pp.Machine(name="random", axes=tuple(axes))


def random_positions(random: np.random.Generator, machine: pp.Machine) -> dict[str, float]:
    """Return positions of some axes: anywhere, at an end of the travel, or hardly moved."""
    chosen = random.permutation(len(machine.axes))[: random.integers(1, len(machine.axes) + 1)]
    positions = {}
    for axis in (machine.axes[index] for index in sorted(chosen)):
        low, high = axis.travel
        middle = low + 0.5 * (high - low)
        near = middle + 10 ** random.uniform(-9, 0) * min(1.0, high - middle)
        positions[axis.name] = float(
            random.choice([random.uniform(low, high), low, high, middle, near])
        )
    return positions


def random_step(random: np.random.Generator, machine: pp.Machine) -> Step:
    """Return a step of any kind."""
    law = LAW_NAMES[random.integers(len(LAW_NAMES))]
    speed = float(10 ** random.uniform(0, 4)) if random.random() < 0.5 else None
    to = random_positions(random, machine)
    if not any(machine.axis(name).kind == "linear" for name in to):
        speed = None
    kind = random.integers(7)
    if kind in {0, 1}:
        return pp.Move(to, law=law, arrival=ARRIVALS[random.integers(2)])
    if kind in {2, 3}:
        return pp.Line(to, law=law, speed=speed)
    if kind == 4:
        points = tuple(
            pp.Waypoint(random_positions(random, machine), wait=float(random.choice([0.0, 0.1])))
            for _ in range(random.integers(1, 8))
        )
        return pp.PathStep(points, law=law)
    if kind == 5:
        return pp.Wait(float(random.choice([0.0, random.uniform(0, 1)])))
    return pp.Signal({"valve": bool(random.integers(2))})


def random_job(seed: int) -> pp.Job | None:
    """Return a job of one to twelve steps; None where it happens to do nothing."""
    random = np.random.default_rng(seed)
    machine = random_machine(random)
    steps = tuple(random_step(random, machine) for _ in range(random.integers(1, 13)))
    start = {axis.name: float(random.uniform(*axis.travel)) for axis in machine.axes}
    try:
        return pp.Job(machine, pp.Cycle(steps=steps, start=start))
    except pp.InputError as error:
        if "nothing to do" in str(error):
            return None
        raise


def faults(seed: int) -> list[str]:
    """Return what is wrong with the plan of a random job, and with its table."""
    job = random_job(seed)
    if job is None:
        return []
    plan = pp.plan(job)
    table = plan.setpoints(period=min(max(0.001, round(plan.duration / 2000, 3)), 1.0))
    findings = [*plan.check(), *pp.check_table(table, job.machine)]
    shorter = [
        f"{step.name} takes {step.duration}, less than the bound {step.least_time}"
        for step in plan.steps
        if step.least_time is not None and step.duration < step.least_time
    ]
    return [str(finding) for finding in findings if not finding.ok] + shorter


def main() -> None:
    """Judge as many random jobs as asked for, and print what was found."""
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 10_000
    start = time.perf_counter()
    found = Counter({seed: len(faults(seed)) for seed in range(count)})
    bad = sorted(seed for seed, number in found.items() if number)
    taken = time.perf_counter() - start
    print(f"{count} random cycles in {taken:.0f} s; with faults: {len(bad)}")
    for seed in bad[:10]:
        print(f"seed {seed}:", *faults(seed), sep="\n  ")


if __name__ == "__main__":
    main()
