"""What counts an axis's position: a drive, as a ratio of whole numbers."""

from __future__ import annotations

from dataclasses import KW_ONLY, dataclass
from fractions import Fraction
from functools import cached_property

from profileplan.inputs.rules import LIMIT, POSITION, Judge, is_number, shown

MOST_PER_TURN = 2**31 - 1
MOST_TEETH = 1_000_000


@dataclass(frozen=True)
class Twin:
    """A second drive on the same axis, with the same increments.

    Parameters
    ----------
    name : str
        Heads its columns.
    direction : {1, -1}
        Whether it counts upward as the axis does.
    offset : float
        What is added to the axis's position before it is counted [mm or deg].
    """

    name: str
    _: KW_ONLY
    direction: int = 1
    offset: float = 0.0

    def __post_init__(self) -> None:
        judge = Judge()
        judge.column("name", self.name)
        _judge_place(judge, self.direction, self.offset)
        judge.finish()


@dataclass(frozen=True)
class Drive:
    """What counts an axis's position.

    Parameters
    ----------
    increments : int
        Of one turn of the motor, all edges counted: four times the lines of an encoder whose edges
        are counted singly.
    lead : float
        What the axis travels in a turn of the gear's output [mm or deg], as the decimal number that
        it is written as.
    gear : (int, int)
        Turns of the motor to turns of the gear's output.
    direction : {1, -1}
        Whether it counts upward as the axis does.
    offset : float
        What is added to the axis's position before it is counted [mm or deg].
    wrap : float, optional
        Travel after which a rotary axis counts from 0 again [deg], a whole number of increments.
    also : Twin, optional
        A second drive on the axis.

    Examples
    --------
    >>> Drive(10000, lead=20.0, gear=(3, 1)).ratio
    Fraction(1500, 1)
    """

    increments: int
    _: KW_ONLY
    lead: float
    gear: tuple[int, int] = (1, 1)
    direction: int = 1
    offset: float = 0.0
    wrap: float | None = None
    also: Twin | None = None

    def __post_init__(self) -> None:
        judge = Judge()
        judge.whole("increments", self.increments, 1, MOST_PER_TURN)
        judge.number("lead", self.lead, LIMIT, "mm or deg")
        judge_gear(judge, self.gear)
        _judge_place(judge, self.direction, self.offset)
        judge.optional("wrap", self.wrap, LIMIT, "deg")
        if not judge.faults and self.wrap is not None:
            turn = self.ratio * _exact(self.wrap)
            if turn.denominator != 1:
                judge.note(
                    "wrap",
                    f"{self.wrap:g} deg are {float(turn):.6f} increments; a whole number is needed",
                )
        judge.finish()

    @cached_property
    def ratio(self) -> Fraction:
        """Increments of a unit of the axis, exactly [1/mm or 1/deg]."""
        return self.increments * Fraction(*self.gear) / _exact(self.lead)

    @property
    def resolution(self) -> float:
        """What an increment stands for [mm or deg]."""
        return float(1 / self.ratio)

    @property
    def wrap_increments(self) -> int | None:
        """Increments after which it counts from 0 again."""
        return None if self.wrap is None else int(self.ratio * _exact(self.wrap))


def judge_gear(judge: Judge, gear: tuple[int, int]) -> None:
    """Judge turns of the motor to turns of the gear's output."""
    try:
        motor, output = gear
    except (TypeError, ValueError):
        judge.note("gear", f"{shown(gear)}; [turns of the motor, turns of the output]")
        return
    judge.whole("gear[1]", motor, 1, MOST_TEETH)
    judge.whole("gear[2]", output, 1, MOST_TEETH)


def _judge_place(judge: Judge, direction: object, offset: object) -> None:
    if direction not in (1, -1) or isinstance(direction, bool):
        judge.note("direction", f"{shown(direction)}; allowed: 1, -1")
    judge.number("offset", offset, POSITION, "mm or deg")


def _exact(value: float) -> Fraction:
    """Return a number as the decimal that it is written as."""
    return Fraction(repr(float(value))) if is_number(value) else Fraction(0)
