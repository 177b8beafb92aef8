"""What a machine file says."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from profileplan.errors import InputError
from profileplan.inputs.dialect import TIME_UNITS, Dialect
from profileplan.inputs.drive import Drive, Twin
from profileplan.inputs.machine import (
    AXIS_KINDS,
    FULL_TURN,
    TABLE_UNITS,
    Axis,
    AxisKind,
    Circle,
    Keepout,
    Machine,
    SetpointSettings,
    Tool,
)
from profileplan.inputs.mechanics import Mechanics, Motor
from profileplan.inputs.periods import period_from_base
from profileplan.inputs.quantities import Quantity
from profileplan.inputs.rules import tidy
from profileplan.inputs.table import Table, open_table

LINEAR = (Quantity.LENGTH, Quantity.VELOCITY, Quantity.ACCELERATION, Quantity.JERK)
ROTARY = (
    *(Quantity.ANGLE, Quantity.ANGULAR_VELOCITY),
    *(Quantity.ANGULAR_ACCELERATION, Quantity.ANGULAR_JERK),
)

TWIN_KEYS = {"name": "also", "direction": "also_direction", "offset": "also_offset"}
"""What a twin's values are called in its drive's table."""


def read_machine(path: Path | str) -> Machine:
    """Read a machine file.

    Parameters
    ----------
    path : Path or str
        A TOML file.

    Raises
    ------
    InputError
        With every fault of the file.
    """
    path = Path(path)
    table = open_table(path)
    axes = _axes(table)
    tool = table.table("tool")
    setpoints = table.table("setpoints")
    keepouts = table.tables("keepouts") or []
    machine = table.build(
        lambda: Machine(
            table.text("name", default=path.stem.strip() or "machine"),
            axes,
            up=table.optional_text("up"),
            tool=_tool(tool) if tool else Tool(),
            keepouts=tuple(_keepout(t, index) for index, t in enumerate(keepouts, start=1)),
            setpoints=_setpoints(setpoints) if setpoints else SetpointSettings(),
            source=path,
        )
    )
    if machine is None or table.faults:
        raise InputError(tidy(table.faults))
    return machine


def _axes(table: Table) -> tuple[Axis, ...]:
    axes = table.table("axes")
    if axes is None:
        table.note("axes", "missing; at least one axis is needed, such as [axes.x]")
        return ()
    tables = [(name, axes.table(name)) for name in axes.raw]
    return tuple(
        _axis(inner, name, f"axis {index}")
        for index, (name, inner) in enumerate(tables, start=1)
        if inner is not None
    )


def _axis(table: Table, name: str, substitute: str) -> Axis:
    kind = table.choice("kind", AXIS_KINDS, default=Axis.kind)
    position, velocity, acceleration, jerk = ROTARY if kind == "rotary" else LINEAR
    axis = table.build(
        lambda: Axis(
            name,
            travel=table.pair("travel", position),
            velocity=table.number("velocity", velocity),
            acceleration=table.number("acceleration", acceleration),
            kind=kind,
            deceleration=table.optional_number("deceleration", acceleration),
            jerk=table.optional_number("jerk", jerk),
            resolution=table.optional_number("resolution", position),
            mechanics=_mechanics(table.table("mechanics"), kind),
            motor=_motor(table.table("motor")),
            drive=_drive(table.table("drive"), position),
        ),
        lambda: _harmless_axis(name, kind),
    )
    return axis or _harmless_axis(substitute, kind)


def _harmless_axis(name: str, kind: AxisKind) -> Axis:
    """Return an axis that stands in for a faulty one, so that the machine can be judged."""
    return Axis(name, travel=(0, 1), velocity=1, acceleration=1, kind=kind)


def _mechanics(table: Table | None, kind: AxisKind) -> Mechanics | None:
    """Return what an axis of a kind moves."""
    if table is None:
        return None
    rotary = kind == "rotary"
    gear = table.wholes("gear")
    drag, lead = Quantity.TORQUE if rotary else Quantity.FORCE, ROTARY if rotary else LINEAR
    return table.build(
        lambda: Mechanics(
            mass=None if rotary else table.number("mass", Quantity.MASS),
            load_inertia=table.number("load_inertia", Quantity.INERTIA) if rotary else None,
            friction=Mechanics.friction if rotary else table.factor("friction", Mechanics.friction),
            drag=table.number("drag", drag, default=Mechanics.drag),
            damping=table.factor("damping", Mechanics.damping),
            counterbalance=Mechanics.counterbalance
            if rotary
            else table.number("counterbalance", Quantity.FORCE, default=Mechanics.counterbalance),
            carries_payload=table.boolean("carries_payload", default=Mechanics.carries_payload),
            lead=table.optional_number("lead", lead[0]),
            gear=None if gear is None else _two(table, gear),
            inertia=table.number("inertia", Quantity.INERTIA, default=Mechanics.inertia),
            efficiency=table.factor("efficiency", Mechanics.efficiency),
            drag_torque=table.number("drag_torque", Quantity.TORQUE, default=Mechanics.drag_torque),
        ),
        # with a lead, so that a motor beside it is not reproached with its lack
        lambda: Mechanics(load_inertia=1, lead=1) if rotary else Mechanics(mass=1, lead=1),
    )


def _motor(table: Table | None) -> Motor | None:
    if table is None:
        return None
    return table.build(
        lambda: Motor(
            rated_torque=table.optional_number("rated_torque", Quantity.TORQUE),
            peak_torque=table.optional_number("peak_torque", Quantity.TORQUE),
            speed=table.optional_number("speed", Quantity.TURNING),
        )
    )


def _tool(table: Table) -> Tool:
    tool = table.build(
        lambda: Tool(
            radius=table.optional_number("radius", Quantity.LENGTH),
            outline=table.outline("outline"),
            margin=table.number("margin", Quantity.LENGTH, default=Tool.margin),
        )
    )
    return tool or Tool()


def _keepout(table: Table, index: int) -> Keepout:
    name = table.text("name", default=f"keep-out {index}")
    circle = table.table("circle")
    dxf = table.optional_text("dxf")
    keepout = table.build(
        lambda: Keepout(
            name,
            outline=table.outline("outline"),
            circle=_circle(circle) if circle else None,
            dxf=None if dxf is None else table.file.parent / dxf,
            layer=table.optional_text("layer"),
            top=table.optional_number("top", Quantity.LENGTH),
        ),
        lambda: Keepout(name, circle=Circle(0, 0, 1)),
    )
    return keepout or Keepout(f"keep-out {index}", circle=Circle(0, 0, 1))


def _circle(table: Table) -> Circle:
    circle = table.build(
        lambda: Circle(
            table.number("x", Quantity.LENGTH),
            table.number("y", Quantity.LENGTH),
            table.number("radius", Quantity.LENGTH),
        )
    )
    return circle or Circle(0, 0, 1)


def _drive(table: Table | None, position: Quantity) -> Drive | None:
    """Return the drive of an axis whose positions are lengths or angles."""
    if table is None:
        return None
    gear = table.wholes("gear")
    if "lead" not in table.raw and position is Quantity.LENGTH:
        table.note("lead", "missing; travel in a turn of the gear's output is needed")
    return table.build(
        lambda: Drive(
            _needed(table, "increments", 1),
            lead=table.number("lead", position, default=FULL_TURN),
            gear=Drive.gear if gear is None else _two(table, gear),
            direction=table.whole("direction", default=Drive.direction),
            offset=table.number("offset", position, default=Drive.offset),
            wrap=table.optional_number("wrap", position),
            also=_twin(table, position),
        )
    )


def _twin(table: Table, position: Quantity) -> Twin | None:
    """Return the second drive of an axis."""
    name = table.optional_text("also")
    direction = table.whole("also_direction", default=Twin.direction)
    offset = table.number("also_offset", position, default=Twin.offset)
    if name is None:
        for key in ("also_direction", "also_offset"):
            if key in table.raw:
                table.note(key, "only with also, the name of the second drive")
        return None
    try:
        return Twin(name, direction=direction, offset=offset)
    except InputError as error:
        raise InputError(
            replace(fault, place=TWIN_KEYS[fault.place]) for fault in error.faults
        ) from None


def _needed(table: Table, key: str, harmless: int) -> int:
    """Return a whole number that must be given, or a harmless one."""
    if key not in table.raw:
        table.note(key, "missing; a whole number is needed")
    return table.whole(key, default=harmless)


def _two(table: Table, gear: tuple[int, ...]) -> tuple[int, int]:
    if len(gear) != 2:
        table.note("gear", f"an array of {len(gear)}; [turns of motor, turns of output] is needed")
        return Drive.gear
    return (gear[0], gear[1])


def _setpoints(table: Table) -> SetpointSettings:
    columns = table.texts("columns")
    settings = table.build(
        lambda: SetpointSettings(
            _period(table),
            columns=SetpointSettings.columns if columns is None else columns,
            units=table.choice("units", TABLE_UNITS, default=SetpointSettings.units),
            dialect=_dialect(table),
        )
    )
    return settings or SetpointSettings()


def _period(table: Table) -> float:
    """Return the period, given as it is or by base and exponent."""
    period = table.number("period", Quantity.TIME, default=SetpointSettings.period)
    inner = table.table("interpolation")
    if inner is None:
        return period
    if "period" in table.raw:
        table.note("interpolation", "is a period too; give one of them")
    found = inner.build(lambda: period_from_base(*_base_and_exponent(inner)))
    return found or SetpointSettings.period


def _base_and_exponent(table: Table) -> tuple[int, int]:
    base, exponent = _needed(table, "base", 1), _needed(table, "exponent", 0)
    # One of them alone says nothing of the period.
    return (base, exponent) if {"base", "exponent"} <= table.raw.keys() else (1, 0)


def _dialect(table: Table) -> Dialect:
    rows = table.whole("rows_a_file", default=0)
    return Dialect(
        delimiter=table.text("delimiter", default=Dialect.delimiter),
        decimal=table.text("decimal", default=Dialect.decimal),
        line_end=table.choice("line_end", ("crlf", "lf"), default=Dialect.line_end),
        decimals=_digits(table, "decimals"),
        significant=_digits(table, "significant"),
        header=table.boolean("header", default=Dialect.header),
        names=_names(table),
        time=table.choice("time", TIME_UNITS, default=Dialect.time),
        comments=table.texts("comments") or (),
        comment_mark=table.text("comment_mark", default=Dialect.comment_mark),
        axis_files=table.boolean("axis_files", default=Dialect.axis_files),
        rows_a_file=rows if "rows_a_file" in table.raw else None,
        tell_joins=table.boolean("tell_joins", default=Dialect.tell_joins),
    )


def _digits(table: Table, key: str) -> dict[str, int]:
    """Return digits by kinds of columns."""
    inner = table.table(key)
    return {} if inner is None else {kind: inner.whole(kind, default=1) for kind in inner.raw}


def _names(table: Table) -> dict[str, str]:
    """Return new names by usual headings."""
    inner = table.table("names")
    return {} if inner is None else {heading: inner.text(heading) for heading in inner.raw}
