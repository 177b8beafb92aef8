"""profileplan plans the motion of Cartesian machines.

    import profileplan as pp

    plan = pp.plan("samples/kiln-loader/cycle.toml")
    plan.duration                           # s
    plan.steps[2].limited_by                # which axis and quantity hold it back
    table = plan.setpoints(period=0.001)    # time (n,), position, velocity, acceleration (n, d)
    plan.check()                            # every requirement, with value, limit and margin

Units are mm or degree, and s. Names are loaded when they are first used (``__init__.pyi`` has the
same names for type checkers; a test holds the two together).
"""

from __future__ import annotations

__version__ = "0.1.0"

_HOMES = {
    "checks": ("Finding", "check", "check_table"),
    "dynamics": ("AxisLoad", "forces", "loads", "torques"),
    "errors": ("Fault", "InputError", "PlanError", "ProfileplanError"),
    "inputs": (
        "Axis",
        "Circle",
        "Cycle",
        "Job",
        "Keepout",
        "Line",
        "Machine",
        "Mechanics",
        "Motor",
        "Move",
        "Part",
        "PathStep",
        "Pattern",
        "Payload",
        "Place",
        "SetpointSettings",
        "Signal",
        "Tool",
        "Trace",
        "Transfer",
        "Wait",
        "Waypoint",
        "expand",
        "load_job",
        "read_cycle",
        "read_machine",
        "read_waypoints",
    ),
    "motion.laws": ("LAWS", "Law", "Limits", "Moves"),
    "motion.trajectory": ("Trajectory",),
    "planning": ("Lever", "Limit", "Plan", "PlannedStep", "plan"),
    "setpoints": ("SetpointTable", "read_csv", "sample", "write_csv"),
    "summary": ("summarise",),
}

__all__ = [  # noqa: PLE0604 - the names are strings, one list for all
    "__version__",
    *(name for names in _HOMES.values() for name in names),
]


def __getattr__(name: str) -> object:
    """Load a public name from the module that it lives in (PEP 562)."""
    from importlib import import_module  # noqa: PLC0415

    for module, names in _HOMES.items():
        if name in names:
            return getattr(import_module(f"{__name__}.{module}"), name)
    message = f"module {__name__!r} has no attribute {name!r}"
    raise AttributeError(message)


def __dir__() -> list[str]:
    return sorted(__all__)
