"""What does an axis move, through which transmission, with which motor?

Units are those of data sheets, nearly all SI: kg, N, N·m, kg·m², turns a minute. Of an axis with
two motors, the values of both together count.
"""

from __future__ import annotations

from dataclasses import KW_ONLY, dataclass, fields

from profileplan.inputs.drive import judge_gear
from profileplan.inputs.rules import LIMIT, MASS, Judge, Range, shown

FORCE = Range(0, 1e9)
INERTIA = Range(0, 1e6)
SHARE = Range(0, 1)
EFFICIENCY = Range(0.01, 1)  # its reciprocal multiplies torques


@dataclass(frozen=True)
class Mechanics:
    """What an axis moves, and the transmission between it and the motor's shaft.

    Exactly one of `mass` and `load_inertia` is given. Without `lead` on a linear axis that has no
    drive either, forces are known and torques are not.

    Parameters
    ----------
    mass : float
        Of all that a linear axis moves, without the payload [kg].
    load_inertia : float
        Of all that a rotary axis turns, about the axis, without the payload [kg·m²].
    friction : float
        Share of the weight borne that is friction, where an axis is linear and not the up axis.
    drag : float
        Friction that is always the same: seals, preload [N; N·m on a rotary axis].
    damping : float
        Friction that grows with velocity [N per m/s; N·m per rad/s on a rotary axis].
    counterbalance : float
        Upward force of a spring, a cylinder or a weight on the up axis [N].
    carries_payload : bool
        Whether the axis moves what hangs at the tool: not so where it moves a table below it.
    lead : float, optional
        Travel in a turn of the gear's output: a screw's lead, a pulley's or a pinion's
        circumference [mm; deg on a rotary axis]. None: the drive's, or a full turn.
    gear : (int, int), optional
        Turns of the motor to turns of the gear's output. None: the drive's, or [1, 1].
    inertia : float
        Of all that turns, the motor's rotor too, reduced to the motor's shaft [kg·m²].
    efficiency : float
        Of the whole transmission, 0.01 to 1, the same whichever side drives: screws that hold
        their load by their own friction are not modelled.
    drag_torque : float
        Friction at the motor's shaft that is always the same [N·m].

    Examples
    --------
    >>> Mechanics(mass=38, drag=25, lead=150, gear=(4, 1), efficiency=0.95).mass
    38
    """

    _: KW_ONLY
    mass: float | None = None
    load_inertia: float | None = None
    friction: float = 0.0
    drag: float = 0.0
    damping: float = 0.0
    counterbalance: float = 0.0
    carries_payload: bool = True
    lead: float | None = None
    gear: tuple[int, int] | None = None
    inertia: float = 0.0
    efficiency: float = 1.0
    drag_torque: float = 0.0

    def __post_init__(self) -> None:
        judge = Judge()
        given = [key for key in ("mass", "load_inertia") if getattr(self, key) is not None]
        if len(given) != 1:
            found = " and ".join(given) if given else "neither of them"
            judge.note("", f"has {found}; mass (linear) or load_inertia (rotary) is needed")
        judge.optional("mass", self.mass, MASS, "kg")
        judge.optional("load_inertia", self.load_inertia, INERTIA, "kg·m²")
        judge.number("friction", self.friction, SHARE, "of the weight")
        judge.number("drag", self.drag, FORCE, "N or N·m")
        judge.number("damping", self.damping, FORCE, "N per m/s or N·m per rad/s")
        judge.number("counterbalance", self.counterbalance, FORCE, "N")
        judge.boolean("carries_payload", self.carries_payload)
        judge.optional("lead", self.lead, LIMIT, "mm or deg")
        if self.gear is not None:
            judge_gear(judge, self.gear)
        judge.number("inertia", self.inertia, INERTIA, "kg·m²")
        judge.number("efficiency", self.efficiency, EFFICIENCY, "of the power")
        judge.number("drag_torque", self.drag_torque, FORCE, "N·m")
        judge.finish()


@dataclass(frozen=True)
class Motor:
    """What an axis's motor can do; what is left out is not judged.

    Parameters
    ----------
    rated_torque : float, optional
        That it bears for ever: the root mean square over the cycle stays below [N·m].
    peak_torque : float, optional
        That it has for a moment [N·m].
    speed : float, optional
        The highest [1/min].
    """

    _: KW_ONLY
    rated_torque: float | None = None
    peak_torque: float | None = None
    speed: float | None = None

    def __post_init__(self) -> None:
        judge = Judge()
        judge.optional("rated_torque", self.rated_torque, LIMIT, "N·m")
        judge.optional("peak_torque", self.peak_torque, LIMIT, "N·m")
        judge.optional("speed", self.speed, LIMIT, "1/min")
        names = [own.name for own in fields(self) if own.name != "_"]
        if all(getattr(self, name) is None for name in names):
            judge.note("", f"says nothing; at least one of {', '.join(names)} is needed")
        rated, peak = self.rated_torque, self.peak_torque
        if not judge.faults and rated is not None and peak is not None and rated > peak:
            judge.note(
                "rated_torque", f"{shown(rated)} N·m; above the peak torque, {shown(peak)} N·m"
            )
        judge.finish()
