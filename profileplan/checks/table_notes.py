"""What should be known of how a table was judged, beside the findings?"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from profileplan.checks.findings import rate_unit

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.checks.findings import Finding
    from profileplan.checks.table_axes import Leap
    from profileplan.inputs import Machine
    from profileplan.setpoints.sets import TableFiles


def notes_on(files: TableFiles, machine: Machine, *, points: bool) -> Iterator[str]:
    """Yield what was taken for granted, and what is not in the table.

    Parameters
    ----------
    files : TableFiles
    machine : Machine
    points : bool
        Whether rows are points between which a drive follows cubics.
    """
    sheet, parts = files.sheet, files.parts
    if len(parts) > 1:
        first, last = parts[0].file.name, parts[-1].file.name
        yield f"{first} to {last} are judged as one table of {len(parts)} parts"
    for file in files.strange:
        yield f"{file.name} has the name of a part beside it, and is no such table"
    missed = [axis.name for number, axis in enumerate(machine.axes) if number not in sheet.axes]
    if missed:
        missed += ["the clearance"] if machine.keepouts else []
        held = ", ".join(machine.axes[number].name for number in sheet.axes) or "no axis"
        yield f"holds {held}; not in it, and not judged: {', '.join(missed)}"
    for column in sheet.columns:
        drive = None if column.axis < 0 else machine.axes[column.axis].drive
        twin = None if drive is None else drive.also
        seconds = column.quantity == "pos" and column.drive == 0 and twin is not None
        if seconds and twin is not None and column.name.startswith(f"{twin.name}_"):
            name = machine.axes[column.axis].name
            yield f"{name} is judged by its second drive, {twin.name}: the first is not in it"
    if sheet.columns[0].name == "tick":
        yield f"a tick is taken for {machine.setpoints.period:g} s, the machine file's period"
    if sheet.coarse:
        names = ", ".join(sheet.coarse)
        yield f"numbers of less than double precision are judged as they stand: {names}"
    if points:
        yield "its rows are judged as points between which a drive follows cubics"


def leap_note(leap: Leap, files: TableFiles) -> str:
    """Return a note on where an acceleration leaps, which no jerk limit allows."""
    file, line = files.place(leap.row.line)
    where = f" of {file.name}" if len(files.parts) > 1 else ""
    return (
        f"{leap.axis.name}: where cubics meet the acceleration leaps, by {leap.size:.6g} "
        f"{rate_unit(leap.axis, 2)} at most, in line {line}{where}, at {leap.row.time:.6g} s; "
        "no jerk limit is kept there, and that is not judged"
    )


def placed(finding: Finding, files: TableFiles) -> Finding:
    """Return a finding with lines of the part that they are in, and the part's name."""
    if finding.line is None:
        return finding
    worst, line = files.place(finding.line)
    names = [worst.name]
    first = finding.first
    if first is not None:
        begin, number = files.place(first.line)
        first = first._replace(line=number)
        names = [begin.name] if begin == worst else [begin.name, f"worst in {worst.name}"]
    what = ", ".join([finding.what, *names] if finding.what else names)
    return replace(finding, line=line, first=first, what=what)
