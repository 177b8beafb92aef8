"""The command line: parse, call one function, print."""

from profileplan.cli import drawings, exports, jobs, pictures
from profileplan.cli.frame import cli, main

__all__ = ["cli", "drawings", "exports", "jobs", "main", "pictures"]
