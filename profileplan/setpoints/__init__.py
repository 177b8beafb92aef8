"""Setpoint tables: what a drive plays, as files that it can read.

Names are loaded from their modules when they are first used: most jobs need few of them.
"""

from typing import TYPE_CHECKING

from profileplan.inputs import Dialect, Drive, Twin, base_from_period, period_from_base
from profileplan.lazy import loader

if TYPE_CHECKING:
    from profileplan.setpoints.binary import write_npy, write_parquet
    from profileplan.setpoints.content import Content, unused_names
    from profileplan.setpoints.drives import doubtful_turns
    from profileplan.setpoints.files import replacing
    from profileplan.setpoints.parts import Part
    from profileplan.setpoints.points import PvtTable, pvt
    from profileplan.setpoints.reading import is_table, read_csv
    from profileplan.setpoints.rounding import Noise, rounding_noise
    from profileplan.setpoints.sampling import COLUMNS, SetpointTable, sample, unplayed
    from profileplan.setpoints.writing import (
        write_csv,
        write_json_lines,
        write_pvt,
        write_table,
    )

__all__ = [
    "COLUMNS",
    "Content",
    "Dialect",
    "Drive",
    "Noise",
    "Part",
    "PvtTable",
    "SetpointTable",
    "Twin",
    "base_from_period",
    "doubtful_turns",
    "is_table",
    "period_from_base",
    "pvt",
    "read_csv",
    "replacing",
    "rounding_noise",
    "sample",
    "unplayed",
    "unused_names",
    "write_csv",
    "write_json_lines",
    "write_npy",
    "write_parquet",
    "write_pvt",
    "write_table",
]

_HOMES = {
    "binary": ("write_npy", "write_parquet"),
    "content": ("Content", "unused_names"),
    "drives": ("doubtful_turns",),
    "files": ("replacing",),
    "parts": ("Part",),
    "points": ("PvtTable", "pvt"),
    "reading": ("is_table", "read_csv"),
    "rounding": ("Noise", "rounding_noise"),
    "sampling": ("COLUMNS", "SetpointTable", "sample", "unplayed"),
    "writing": ("write_csv", "write_json_lines", "write_pvt", "write_table"),
}

__getattr__ = loader(__name__, _HOMES)
