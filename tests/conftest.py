"""What all tests share: repeatable random cases, and values from outside the project.

Values from outside stand in ``published/``, one file a source, in tables of rows. A row says under
``given`` what the source starts from and under ``printed`` what it gets. A result in quotes is
printed so, and holds to half a unit of its last digit. A result that is exact, a plain number or a
fraction in quotes, holds to a few roundings. A test marked ``published(file, table)`` is run for
every row of the table, which it takes as its argument ``row``.
"""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING

import hypothesis
import numpy as np
from numpy.testing import assert_allclose

if TYPE_CHECKING:
    import numpy.typing as npt
    import pytest

FEW_ROUNDINGS = 1e-13
"""Relative: what a dozen operations in double precision may lose."""

hypothesis.settings.register_profile("repeatable", derandomize=True, deadline=None)
hypothesis.settings.load_profile("repeatable")


@dataclass(frozen=True)
class Printed:
    """A result of a source, and how far from it a correct one may lie."""

    value: float
    tolerance: float

    @classmethod
    def of(cls, result: str | float) -> Printed:
        """Return a result as it stands in a file."""
        if isinstance(result, str) and "/" not in result:
            digits = Decimal(result)
            exponent = digits.as_tuple().exponent
            half_a_unit = Decimal((0, (5,), int(exponent) - 1))
            return cls(float(digits), float(half_a_unit))
        value = float(Fraction(result))
        return cls(value, FEW_ROUNDINGS * abs(value))


@dataclass(frozen=True)
class Row:
    """One example of a source: what it starts from, and what it gets."""

    source: str
    given: dict[str, float]
    printed: dict[str, list[Printed]]

    def assert_printed(self, **actual: npt.ArrayLike) -> None:
        """Compare with everything that the row prints, each result by its name."""
        assert set(self.printed) == set(actual), f"{self.source}: not all results are compared"
        for name, results in self.printed.items():
            found = np.atleast_1d(np.asarray(actual[name], dtype=np.float64))
            assert len(results) == found.size, f"{self.source}: {name}"
            for result, value in zip(results, found, strict=True):
                message = f"{self.source}: {name} from {self.given}"
                assert_allclose(value, result.value, 0, result.tolerance, err_msg=message)


def rows(file: str, table: str) -> list[Row]:
    """Return the rows of a table of published values."""
    path = Path(__file__).parent / "published" / file
    content = tomllib.loads(path.read_text(encoding="utf-8"))
    found = []
    for row in content[table]:
        listed = {
            name: result if isinstance(result, list) else [result]
            for name, result in row["printed"].items()
        }
        printed = {name: [Printed.of(item) for item in items] for name, items in listed.items()}
        source = f"{content['source']}, {row['section']}"
        given = {name: float(Fraction(value)) for name, value in row["given"].items()}
        found.append(Row(source, given, printed))
    return found


def pytest_configure(config: pytest.Config) -> None:
    """Make the mark known."""
    config.addinivalue_line("markers", "published(file, table): run for every row, named `row`")


def pytest_generate_tests(metafunc: pytest.Metafunc) -> None:
    """Run a test that is marked so for every row of a table of published values."""
    mark = metafunc.definition.get_closest_marker("published")
    if mark is not None:
        file, table = mark.args
        metafunc.parametrize("row", rows(file, table))
