"""Do the motors bear the motion?"""

from __future__ import annotations

from typing import TYPE_CHECKING

from profileplan import dynamics
from profileplan.checks.findings import MOTOR_CHECKS, Finding, Worst, upper

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.motion.schedule import Schedule


def motor_findings(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge the loads of every axis by what its motor can do, axis by axis.

    The peak of the torque either way, its root of the mean square over the whole cycle, standstill
    included, and the highest speed.
    """
    found = {load.axis: load for load in dynamics.loads(schedule)}
    for axis in schedule.job.machine.axes:
        motor, load = axis.motor, found.get(axis.name)
        if motor is None or load is None:
            yield []
            continue
        peak, speed = load.peak_torque, load.speed
        judged = (
            (None if peak is None else peak._replace(value=abs(peak.value)), motor.peak_torque),
            (None if load.rms_torque is None else Worst(load.rms_torque), motor.rated_torque),
            (speed, motor.speed),
        )
        units = ("N·m", "N·m", "1/min")
        yield [
            upper(Worst(*worst), check, limit, unit, axis)
            for check, unit, (worst, limit) in zip(MOTOR_CHECKS, units, judged, strict=True)
            if worst is not None and limit is not None
        ]
