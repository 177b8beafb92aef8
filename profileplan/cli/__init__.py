"""The command line: parse, call one function, print."""

from profileplan.cli.frame import cli, main

__all__ = ["cli", "main"]
