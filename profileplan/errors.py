"""What can go wrong, and the exit status that goes with it.

::

    ProfileplanError        exit status 2
    ├── InputError          something the user wrote is wrong; carries every fault found
    └── PlanError           the input is sound, but this job cannot be planned

A requirement that a finished plan does not meet is no error: it is a result (exit status 1).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, ClassVar

if TYPE_CHECKING:
    from collections.abc import Iterable
    from pathlib import Path


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong with what the user wrote.

    Parameters
    ----------
    place : str
        Where: a key path such as ``axes.x.velocity``, a line of a CSV file, an entity of a
        drawing. Steps are counted from 1, as in the step table: ``steps[3].move.x``; those of a
        group in the group: ``steps[4].steps[2].move.place``. Empty for the whole file.
    message : str
        What is wrong: the value found and what is allowed, in the user's units.
    file : Path or str, optional
        The file, where there is one.
    """

    place: str
    message: str
    file: Path | str | None = None

    def __str__(self) -> str:
        parts = [str(part) for part in (self.file, self.place) if part]
        return ": ".join([*parts, self.message])

    def within(self, prefix: str, file: Path | str | None = None) -> Fault:
        """Return this fault as seen from the record that holds the faulty one.

        Parameters
        ----------
        prefix : str
            Key path of the record with the fault, seen from the record that holds it.
        file : Path or str, optional
            The file that both stand in, where this fault does not name one yet.
        """
        joint = "" if not prefix or not self.place or self.place.startswith("[") else "."
        return replace(self, place=f"{prefix}{joint}{self.place}", file=self.file or file)


class ProfileplanError(Exception):
    """Root of every error that this package raises on purpose."""

    exit_status: ClassVar[int] = 2


class InputError(ProfileplanError, ValueError):
    """Something the user wrote is wrong.

    Parameters
    ----------
    faults : iterable of Fault
        Every fault found, in the order of the input.
    """

    def __init__(self, faults: Iterable[Fault]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(str(fault) for fault in self.faults))


class PlanError(ProfileplanError):
    """The input is sound, but the job cannot be planned; the message says what would help."""
