"""What job a file describes: a cycle, the points of a waypoint file, or a drawing, on a machine."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar

from profileplan.errors import Fault, InputError
from profileplan.inputs.cycle import Cycle, PathStep, Step, Trace, Wait, Waypoint
from profileplan.inputs.cycle_file import cycle_reading, machine_path
from profileplan.inputs.job import Job, fit_faults, line_and_column
from profileplan.inputs.machine_file import read_machine
from profileplan.inputs.rules import tidy
from profileplan.inputs.table import open_table
from profileplan.inputs.waypoints import waypoint_reading

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable

    from profileplan.inputs.machine import Machine

Result = TypeVar("Result")


def load_job(
    source: Path | str,
    *,
    machine: Path | str | None = None,
    speed: float | None = None,
    tolerance: float | None = None,
) -> Job:
    """Read a job, with the machine file and the waypoint files that belong to it.

    Parameters
    ----------
    source : Path or str
        A cycle (``.toml``); points (``.csv``): the first is the start, and a path leads through
        the others; or a drawing (``.dxf``), all outlines of which are traced as drawn, from 0 of
        every axis, or the end of its travel that is nearest to 0.
    machine : Path or str, optional
        The machine file; for a cycle it overrides the one that the cycle names.
    speed : float, optional
        Highest speed through the points of a waypoint file, or along a drawing [mm/s].
    tolerance : float, optional
        Farthest distance between the motion and a waypoint file's path or a drawing [mm]; None: 0,
        which stops at every point.

    Raises
    ------
    InputError
        With every fault of all the files.
    """
    source = Path(source)
    machine_file = None if machine is None else Path(machine)
    match source.suffix.lower():
        case ".toml":
            return _cycle_job(source, machine_file, _not_for_a_cycle(speed, tolerance))
        case ".csv":
            return _waypoint_job(source, machine_file, speed=speed, tolerance=tolerance)
        case ".dxf":
            return _drawing_job(source, machine_file, speed=speed, tolerance=tolerance)
        case suffix:
            found = f'"{suffix}" files are not read' if suffix else "has no suffix"
            message = (
                f"{found}; a cycle (.toml), a waypoint file (.csv) or a drawing (.dxf) is needed"
            )
    raise InputError([Fault("", message, source)])


def _not_for_a_cycle(speed: float | None, tolerance: float | None) -> list[Fault]:
    given = {"speed": speed, "tolerance": tolerance}
    message = "only for a waypoint or outline file; a cycle gives it in its steps"
    return [Fault(name, message) for name, value in given.items() if value is not None]


def _cycle_job(source: Path, machine_file: Path | None, faults: list[Fault]) -> Job:
    table = _attempt(lambda: open_table(source), faults)
    if machine_file is None and table is not None:
        machine_file = machine_path(table)
        if machine_file is None:
            message = (
                'missing; write machine = "machine.toml" in the cycle file, or give --machine FILE'
            )
            faults.append(Fault("machine", message, source))
    machine = _machine(machine_file, faults)
    if table is None:
        raise InputError(tidy(faults))
    reading = cycle_reading(table, machine)
    faults += reading.faults
    if machine is None or reading.cycle is None or faults:
        if machine is not None:
            fit = fit_faults(machine, reading.start, reading.steps, source, written=reading.written)
            faults += _not_covered(fit, reading.faults)
        raise InputError(tidy(faults))
    return Job(machine, reading.cycle)


def _machine(file: Path | None, faults: list[Fault]) -> Machine | None:
    return None if file is None else _attempt(lambda: read_machine(file), faults)


def _not_covered(fit: Iterable[Fault], found: Iterable[Fault]) -> list[Fault]:
    """Return the faults that stand neither at nor inside a place that is faulty already."""
    faulty = {(str(fault.file), fault.place) for fault in found}
    return [fault for fault in fit if not any(p in faulty for p in _places_around(fault))]


def _places_around(fault: Fault) -> list[tuple[str, str]]:
    """Return the place of a fault and of all that holds it, with the file."""
    ends = [i for i, letter in enumerate(fault.place) if letter in ".["]
    return [(str(fault.file), fault.place[:end]) for end in (*ends, len(fault.place))]


def _waypoint_job(
    source: Path, machine_file: Path | None, *, speed: float | None, tolerance: float | None
) -> Job:
    faults: list[Fault] = []
    if machine_file is None:
        message = "a waypoint file needs a machine: give --machine FILE"
        faults.append(Fault("", message, source))
    machine = _machine(machine_file, faults)
    points, found = waypoint_reading(source)
    faults += found
    if len(points) == 1 and not found:
        message = "one point only, the start; at least one more is needed to go to"
        faults.append(Fault(f"line {points[0].line}", message, source))
    path = _attempt(
        lambda: PathStep(
            points[1:] or (Waypoint({"-": 0.0}),),
            file=source,
            speed=speed,
            tolerance=PathStep.tolerance if tolerance is None else tolerance,
        ),
        faults,
    )
    if machine is not None and (faults or path is None):
        faults += _row_faults(machine, points, source)
    if machine is None or path is None or faults:
        raise InputError(tidy(faults))
    return _job_from_start(machine, points[0], path)


def _drawing_job(
    source: Path, machine_file: Path | None, *, speed: float | None, tolerance: float | None
) -> Job:
    faults: list[Fault] = []
    if machine_file is None:
        faults.append(Fault("", "a drawing needs a machine: give --machine FILE", source))
    machine = _machine(machine_file, faults)
    trace = _attempt(
        lambda: Trace(
            source, speed=speed, tolerance=Trace.tolerance if tolerance is None else tolerance
        ),
        faults,
    )
    if machine is None or trace is None or faults:
        raise InputError(tidy(faults))
    start = {axis.name: min(max(0.0, axis.travel[0]), axis.travel[1]) for axis in machine.axes}
    return Job(machine, Cycle((trace,), start, source=source))


def _row_faults(machine: Machine, points: tuple[Waypoint, ...], file: Path) -> list[Fault]:
    """Return what does not fit the machine in the rows of a file that is faulty otherwise.

    Whether a start is complete cannot be told there, as its row may be a faulty one.
    """
    if not points:
        return []
    fit = fit_faults(machine, {}, [PathStep(points, file=file)], file)
    return [fault for fault in fit if not fault.place.startswith("start")]


def _job_from_start(machine: Machine, start: Waypoint, path: PathStep) -> Job:
    """Return the job of a path; a fault of the start stands in the first row.

    A speed in that row has no meaning, as no way leads to the start.
    """
    before: tuple[Step, ...] = (Wait(start.wait, name=start.name),) if start.wait > 0 else ()
    try:
        return Job(machine, Cycle((*before, path), start.to, source=path.file))
    except InputError as error:
        placed = [_in_first_row(fault, start, machine) for fault in error.faults]
        raise InputError(tidy(placed)) from None


def _in_first_row(fault: Fault, start: Waypoint, machine: Machine) -> Fault:
    name = fault.place.removeprefix("start.")
    if name == fault.place:
        return fault
    known = name in machine.axis_names
    return replace(fault, place=line_and_column(start, name) if known else f"column {name}")


def _attempt(read: Callable[[], Result], faults: list[Fault]) -> Result | None:
    """Return what is read, or None where that fails, with the faults added to the list."""
    try:
        return read()
    except InputError as error:
        faults += error.faults
        return None
