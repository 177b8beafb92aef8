"""Which period do the base and the exponent of a drive's interpolation time stand for?

Source: IEC 61800-7-201, object 60C2h: the period is base × 10^exponent seconds.
"""

from __future__ import annotations

from fractions import Fraction

from profileplan.errors import Fault, InputError
from profileplan.inputs.machine import SetpointSettings
from profileplan.inputs.rules import Judge

LEAST_BASE, MOST_BASE = 1, 255
LEAST_EXPONENT, MOST_EXPONENT = -128, 63


def period_from_base(base: int, exponent: int) -> float:
    """Return the period [s] of a base and an exponent.

    Parameters
    ----------
    base : int
        1 to 255.
    exponent : int
        -128 to 63.

    Raises
    ------
    InputError
        Numbers out of range, or a period that no table has.

    Examples
    --------
    >>> period_from_base(25, -5)
    0.00025
    """
    judge = Judge()
    judge.whole("base", base, LEAST_BASE, MOST_BASE)
    judge.whole("exponent", exponent, LEAST_EXPONENT, MOST_EXPONENT)
    judge.finish()
    return SetpointSettings(float(base * Fraction(10) ** exponent)).period


def base_from_period(period: float) -> tuple[int, int]:
    """Return the base and the exponent of a period [s], with the least base.

    Raises
    ------
    InputError
        A period that no table has, or one that needs a base above 255.

    Examples
    --------
    >>> base_from_period(0.00025)
    (25, -5)
    """
    base, exponent = round(SetpointSettings(period).period * 1e9), -9
    while base % 10 == 0:
        base, exponent = base // 10, exponent + 1
    if base > MOST_BASE:
        message = f"{period:g} s is {base} × 10^{exponent} s; a drive takes {MOST_BASE} at most"
        raise InputError([Fault("period", message)])
    return base, exponent
