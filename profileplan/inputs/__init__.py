"""What the user wrote: machine file, cycle file and waypoint file as frozen records."""

from profileplan.inputs.cycle import (
    LAW_NAMES,
    Cycle,
    LawName,
    Line,
    Move,
    PathStep,
    Payload,
    Place,
    Signal,
    Step,
    Trace,
    Transfer,
    Wait,
    Waypoint,
)
from profileplan.inputs.cycle_file import read_cycle
from profileplan.inputs.dialect import Dialect
from profileplan.inputs.drive import Drive, Twin
from profileplan.inputs.job import Job
from profileplan.inputs.machine import (
    Axis,
    AxisLimits,
    Circle,
    Keepout,
    Machine,
    SetpointSettings,
    Tool,
)
from profileplan.inputs.machine_file import read_machine
from profileplan.inputs.mechanics import Mechanics, Motor
from profileplan.inputs.patterns import Expansion, Part, Pattern, expand
from profileplan.inputs.periods import base_from_period, period_from_base
from profileplan.inputs.rules import Outline, Positions
from profileplan.inputs.source import load_job
from profileplan.inputs.waypoints import read_waypoints

__all__ = [
    "LAW_NAMES",
    "Axis",
    "AxisLimits",
    "Circle",
    "Cycle",
    "Dialect",
    "Drive",
    "Expansion",
    "Job",
    "Keepout",
    "LawName",
    "Line",
    "Machine",
    "Mechanics",
    "Motor",
    "Move",
    "Outline",
    "Part",
    "PathStep",
    "Pattern",
    "Payload",
    "Place",
    "Positions",
    "SetpointSettings",
    "Signal",
    "Step",
    "Tool",
    "Trace",
    "Transfer",
    "Twin",
    "Wait",
    "Waypoint",
    "base_from_period",
    "expand",
    "load_job",
    "period_from_base",
    "read_cycle",
    "read_machine",
    "read_waypoints",
]
