"""Every sample is planned, checked and exported as a user would do it."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import pytest
from click.testing import CliRunner
from numpy.testing import assert_array_less

import profileplan as pp
from profileplan.cli import cli

if TYPE_CHECKING:
    from collections.abc import Callable

SAMPLES = Path(__file__).parents[1] / "samples"

JOBS = {
    "kiln-loader": (["cycle.toml"], 0),
    "kiln-loader/pallet": (["pallet.toml"], 0),
    "tile-turner": (["cycle.toml"], 1),
    "sealant-portal": (["bead.csv", "-m", "machine.toml"], 0),
    "sealant-portal/gasket": (["gasket.toml"], 0),
    "glaze-inspection": (["pass.csv", "-m", "../kiln-loader/machine.toml", "--tolerance", "5"], 0),
    "faulty": (["cycle.toml"], 2),
}
"""Folder, with a job's name where it has several → arguments, and the exit status.

The tile turner misses its target on purpose.
"""

MACHINES = {"kiln-loader/pallet": "cell.toml"}
"""Machine files that are not called machine.toml."""

LONGEST = "kiln-loader/pallet"
"""Planned once only."""

GOOD = [name for name, (_, status) in JOBS.items() if status < 2]


def folder(name: str) -> Path:
    """Return the folder of a sample."""
    return SAMPLES / name.split("/", maxsplit=1)[0]


def arguments(name: str) -> list[str]:
    """Return a sample's arguments with its folder put before every file."""
    words, _ = JOBS[name]
    return [str(folder(name) / word) if "." in word else word for word in words]


def machine_of(name: str) -> Path:
    """Return a sample's machine file."""
    files = [Path(word) for word in arguments(name) if word.endswith("machine.toml")]
    return files[0] if files else folder(name) / MACHINES.get(name, "machine.toml")


def test_every_sample_is_listed_here() -> None:
    """A sample that no test runs will break unseen."""
    assert {folder(name) for name in JOBS} == set(SAMPLES.iterdir())


class Planned(NamedTuple):
    """What planning a sample has ended with, what it has said, and where its files are."""

    status: int
    output: str
    folder: Path


@pytest.fixture(scope="module", name="planned")
def fixture_planned(tmp_path_factory: pytest.TempPathFactory) -> Callable[[str], Planned]:
    """Return what plans a sample, once for all tests."""
    known: dict[str, Planned] = {}

    def planned(name: str) -> Planned:
        if name not in known:
            to = tmp_path_factory.mktemp("sample") / "out"
            result = CliRunner().invoke(cli, ["plan", *arguments(name), "-o", str(to)])
            known[name] = Planned(result.exit_code, result.output, to)
        return known[name]

    return planned


@pytest.mark.parametrize("name", JOBS)
def test_plans_of_samples_end_with_their_exit_status(
    name: str, planned: Callable[[str], Planned]
) -> None:
    """0 fine, 1 a requirement is not met, 2 bad input."""
    assert JOBS[name][1] == planned(name).status, planned(name).output


@pytest.mark.parametrize("name", [name for name in JOBS if name != LONGEST])
def test_checks_of_samples_end_with_their_exit_status(name: str) -> None:
    """The same as for their plans, which are checked as well."""
    result = CliRunner().invoke(cli, ["check", *arguments(name)])
    assert JOBS[name][1] == result.exit_code, result.output


@pytest.mark.parametrize("name", GOOD)
def test_differences_of_the_tables_of_samples_keep_the_limits(
    name: str, planned: Callable[[str], Planned]
) -> None:
    """A drive that differentiates positions must see no limit broken.

    First, second and third differences over the period, its square and its cube are means of the
    derivatives, so they keep the limits as well; rounding to nine decimals adds at most 1, 2 and 4
    units of the last decimal.
    """
    machine = pp.read_machine(machine_of(name))
    lines = (planned(name).folder / "setpoints.csv").read_text(encoding="utf-8").splitlines()
    columns = lines[0].split(",")
    rows = np.array([[float(cell) for cell in line.split(",")] for line in lines[1:]])
    period = machine.setpoints.period
    for axis in machine.axes:
        position = rows[:, columns.index(f"{axis.name}_pos_{axis.unit}")]
        position = np.pad(position, 3, mode="edge")
        either = max(axis.limits.acceleration, axis.limits.deceleration)
        for order, limit in enumerate((axis.limits.velocity, either, axis.limits.jerk), start=1):
            rounding = 2 ** (order - 1) * 1e-9
            greatest = np.abs(np.diff(position, order)).max()
            assert_array_less(greatest, limit * period**order * (1 + 1e-9) + 1.01 * rounding)


@pytest.mark.parametrize("name", GOOD)
def test_tables_of_samples_pass_the_table_check(
    name: str, planned: Callable[[str], Planned]
) -> None:
    """What the program writes, its own check of tables must accept."""
    table, machine = str(planned(name).folder / "setpoints.csv"), str(machine_of(name))
    result = CliRunner().invoke(cli, ["check", table, "-m", machine])
    assert result.exit_code == 0, result.output
