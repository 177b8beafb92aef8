"""Setpoint tables: what a drive plays, as files that it can read."""

from profileplan.inputs.dialect import Dialect
from profileplan.inputs.drive import Drive, Twin
from profileplan.inputs.periods import base_from_period, period_from_base
from profileplan.setpoints.binary import write_npy, write_parquet
from profileplan.setpoints.content import Content
from profileplan.setpoints.files import replacing
from profileplan.setpoints.points import PvtTable, pvt
from profileplan.setpoints.reading import is_table, read_csv
from profileplan.setpoints.rounding import Noise, rounding_noise
from profileplan.setpoints.sampling import COLUMNS, SetpointTable, sample, unplayed
from profileplan.setpoints.writing import (
    Part,
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
    "is_table",
    "period_from_base",
    "pvt",
    "read_csv",
    "replacing",
    "rounding_noise",
    "sample",
    "unplayed",
    "write_csv",
    "write_json_lines",
    "write_npy",
    "write_parquet",
    "write_pvt",
    "write_table",
]
