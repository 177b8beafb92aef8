"""What a machine file says."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from profileplan.errors import InputError
from profileplan.inputs.machine import (
    AXIS_KINDS,
    Axis,
    AxisKind,
    Circle,
    Keepout,
    Machine,
    SetpointSettings,
    Tool,
)
from profileplan.inputs.quantities import Quantity
from profileplan.inputs.rules import tidy
from profileplan.inputs.table import Table, open_table

if TYPE_CHECKING:
    from collections.abc import Mapping

LINEAR = (Quantity.LENGTH, Quantity.VELOCITY, Quantity.ACCELERATION, Quantity.JERK)
ROTARY = (
    *(Quantity.ANGLE, Quantity.ANGULAR_VELOCITY),
    *(Quantity.ANGULAR_ACCELERATION, Quantity.ANGULAR_JERK),
)


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
            mechanics=_mechanics(table),
        ),
        lambda: _harmless_axis(name, kind),
    )
    return axis or _harmless_axis(substitute, kind)


def _harmless_axis(name: str, kind: AxisKind) -> Axis:
    """Return an axis that stands in for a faulty one, so that the machine can be judged."""
    return Axis(name, travel=(0, 1), velocity=1, acceleration=1, kind=kind)


def _mechanics(table: Table) -> Mapping[str, object] | None:
    mechanics = table.table("mechanics")
    return None if mechanics is None else mechanics.raw


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


def _setpoints(table: Table) -> SetpointSettings:
    settings = table.build(
        lambda: SetpointSettings(
            table.number("period", Quantity.TIME, default=SetpointSettings.period)
        )
    )
    return settings or SetpointSettings()
