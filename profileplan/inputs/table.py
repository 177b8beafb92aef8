"""What values a TOML table holds, with every fault noted at its place.

A `Table` hands out Python values of the type asked for. Where a value is missing or unusable it
notes the fault and hands out a harmless value instead, so that the record can be built and the
other values are judged too; whoever reads the file raises at the end if anything was noted.
What is in range is judged by the records alone.
"""

from __future__ import annotations

import re
import tomllib
from typing import TYPE_CHECKING, TypeGuard, TypeVar

from profileplan.errors import Fault, InputError
from profileplan.inputs.files import read_text
from profileplan.inputs.quantities import Quantity, parse_quantity
from profileplan.inputs.rules import is_number, join, near, quoted, shortened, shown

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Mapping
    from pathlib import Path

    from profileplan.inputs.machine import AxisKind
    from profileplan.inputs.rules import Outline

Choice = TypeVar("Choice", bound=str)
Built = TypeVar("Built")

HARMLESS = 1.0  # in range wherever a number is asked for
HARMLESS_OUTLINE = ((0.0, 0.0), (1.0, 0.0), (0.0, 1.0))

TOML_PLACE = re.compile(r"(.*) \(at (.*)\)", re.DOTALL)


class Table:
    """A TOML table, its key path, and the list that takes the faults of the whole file.

    Parameters
    ----------
    raw : mapping
        What the table holds.
    place : str
        Its key path; empty for the whole file.
    file : Path
        The file it stands in.
    faults : list of Fault
        Takes what is found.
    """

    def __init__(
        self, raw: Mapping[str, object], *, place: str, file: Path, faults: list[Fault]
    ) -> None:
        self.raw = raw
        self.place = place
        self.file = file
        self.faults = faults
        self._asked: dict[str, None] = {}

    def note(self, key: str, message: str) -> None:
        """Note a fault of a key, or of the table itself where the key is empty."""
        place = join(self.place, key) if key else self.place
        self.faults.append(Fault(place, message, self.file))

    def number(self, key: str, quantity: Quantity, default: float | None = None) -> float:
        """Return a quantity in axis units; without a default it must be given."""
        value = self.optional_number(key, quantity)
        if value is not None:
            return value
        if default is None:
            self.note(key, f"missing; {quantity.title} in {quantity.unit} is needed")
            return HARMLESS
        return default

    def optional_number(self, key: str, quantity: Quantity) -> float | None:
        """Return a quantity in axis units, or None where it is left out."""
        raw = self._take(key)
        return None if raw is None else self._parsed(join(self.place, key), raw, quantity)

    def factor(self, key: str, default: float) -> float:
        """Return a number without a unit."""
        raw = self._take(key)
        if raw is None:
            return default
        if not is_number(raw):
            self.note(key, f"{shown(raw)}; a number without a unit is needed")
            return default
        return self._parsed(join(self.place, key), raw, Quantity.LENGTH)

    def whole(self, key: str, default: int) -> int:
        """Return a whole number."""
        raw = self._take(key)
        if raw is None:
            return default
        if isinstance(raw, bool) or not isinstance(raw, int):
            self.note(key, f"{shown(raw)}; a whole number is needed")
            return default
        return raw

    def wholes(self, key: str) -> tuple[int, ...] | None:
        """Return an array of whole numbers, or None where it is left out."""
        raw = self._take(key)
        if raw is None:
            return None
        numbers = is_array(raw) and [
            item for item in raw if isinstance(item, int) and not isinstance(item, bool)
        ]
        if not is_array(raw) or not numbers or len(numbers) != len(raw):
            what = f"[{', '.join(map(shown, raw))}]" if is_array(raw) else shown(raw)
            self.note(key, f"{shortened(what)}; an array of whole numbers is needed")
            return None
        return tuple(numbers)

    def text(self, key: str, default: str | None = None) -> str:
        """Return a text; without a default it must be given."""
        value = self.optional_text(key)
        if value is not None:
            return value
        if default is None:
            self.note(key, "missing; a text is needed")
            return "-"
        return default

    def optional_text(self, key: str) -> str | None:
        """Return a text, or None where it is left out."""
        raw = self._take(key)
        if raw is None or isinstance(raw, str):
            return raw
        self.note(key, f"{shown(raw)}; a text is needed")
        return "-"

    def texts(self, key: str) -> tuple[str, ...] | None:
        """Return an array of texts, or None where it is left out."""
        raw = self._take(key)
        if raw is None:
            return None
        texts = tuple(item for item in raw if isinstance(item, str)) if is_array(raw) else ()
        if not is_array(raw) or len(texts) != len(raw):
            self.note(key, f"{shown(raw)}; an array of texts is needed")
            return ("-",)
        return texts

    def choice(self, key: str, names: tuple[Choice, ...], default: Choice) -> Choice:
        """Return one of `names`."""
        return self.optional_choice(key, names) or default

    def optional_choice(self, key: str, names: tuple[Choice, ...]) -> Choice | None:
        """Return one of `names`, or None where the key is left out."""
        raw = self._take(key)
        for name in names:
            if name == raw:
                return name
        if raw is not None:
            self.note(key, f"{shown(raw)}; allowed: {quoted(names)}{near(raw, names)}")
        return None

    def boolean(self, key: str, *, default: bool) -> bool:
        """Return true or false."""
        raw = self._take(key)
        if raw is None or isinstance(raw, bool):
            return default if raw is None else raw
        self.note(key, f"{shown(raw)}; allowed: true or false")
        return default

    def pair(self, key: str, quantity: Quantity) -> tuple[float, float]:
        """Return [lowest, highest], which must be given."""
        raw = self._take(key)
        if is_array(raw) and len(raw) == 2:
            place = join(self.place, key)
            count = len(self.faults)
            low, high = (
                self._parsed(f"{place}[{index}]", item, quantity)
                for index, item in enumerate(raw, start=1)
            )
            return (low, high) if len(self.faults) == count else (0.0, HARMLESS)
        found = "missing" if raw is None else shown(raw)
        if is_array(raw):
            found = f"an array of {len(raw)}"
        self.note(key, f"{found}; [lowest, highest] in {quantity.unit} is needed")
        return (0.0, HARMLESS)

    def outline(self, key: str) -> Outline | None:
        """Return the corners of an outline, mm, or None where it is left out."""
        raw = self._take(key)
        if raw is None:
            return None
        if not is_array(raw):
            self.note(key, f"{shown(raw)}; an array of points [x, y] is needed")
            return HARMLESS_OUTLINE
        count = len(self.faults)
        place = join(self.place, key)
        corners = tuple(self._corner(f"{place}[{i}]", item) for i, item in enumerate(raw, start=1))
        return corners if len(self.faults) == count else HARMLESS_OUTLINE

    def positions(self, keys: Iterable[str], kinds: Mapping[str, AxisKind]) -> dict[str, float]:
        """Return the positions that stand under keys, in axis units.

        Parameters
        ----------
        keys : iterable of str
            Names of axes.
        kinds : mapping
            The kinds of the axes, as far as they are known: a position with a unit must fit.
        """
        return {key: self._position(key, kinds.get(key)) for key in keys}

    def table(self, key: str) -> Table | None:
        """Return the table under a key, or None where it is left out."""
        raw = self._take(key)
        return None if raw is None else self._inner(join(self.place, key), raw)

    def tables(self, key: str) -> list[Table] | None:
        """Return the tables of an array, or None where it is left out."""
        raw = self._take(key)
        if raw is None:
            return None
        place = join(self.place, key)
        if not is_array(raw):
            self.note(key, f"{shown(raw)}; an array of tables is needed")
            return []
        return [self._inner(f"{place}[{index}]", item) for index, item in enumerate(raw, start=1)]

    def build(self, *makers: Callable[[], Built]) -> Built | None:
        """Make a record, note its faults and the keys that nobody asked for.

        Parameters
        ----------
        *makers : callable
            The first makes the record. Where that fails, the others are tried for a record that
            stands in for it, and their faults are not noted.

        Returns
        -------
        record
            The first that could be made; None where none could.
        """
        built = None
        for maker in makers:
            try:
                built = maker()
                break
            except InputError as error:
                if maker is makers[0]:
                    self.faults += [fault.within(self.place, self.file) for fault in error.faults]
        self.finish()
        return built

    def finish(self, also: Iterable[str] = ()) -> None:
        """Note the keys that nobody asked for, with the known key that each is nearly like.

        Parameters
        ----------
        also : iterable of str
            More words to compare with.
        """
        known = [*self._asked, *also]
        for key in self.raw:
            if key not in self._asked:
                hint = near(key, known) or f"; allowed: {', '.join(known)}"
                self.note(key, f"unknown key{hint}")
                self._asked[key] = None

    def skip(self, key: str) -> None:
        """Count a key as asked for."""
        self._asked[key] = None

    def _take(self, key: str) -> object:
        self._asked[key] = None
        return self.raw.get(key)

    def _parsed(self, place: str, raw: object, quantity: Quantity) -> float:
        try:
            return parse_quantity(raw, quantity)
        except ValueError as error:
            self.faults.append(Fault(place, str(error), self.file))
            return HARMLESS

    def _position(self, key: str, kind: AxisKind | None) -> float:
        raw = self._take(key)
        if kind is None and isinstance(raw, str):
            try:
                return parse_quantity(raw, Quantity.ANGLE)
            except ValueError:
                kind = "linear"  # a fault speaks of lengths, as nearly all axes are linear
        quantity = Quantity.ANGLE if kind == "rotary" else Quantity.LENGTH
        return self._parsed(join(self.place, key), raw, quantity)

    def _corner(self, place: str, raw: object) -> tuple[float, float]:
        if not is_array(raw) or len(raw) != 2:
            self.faults.append(Fault(place, f"{shown(raw)}; a point [x, y] is needed", self.file))
            return (0.0, 0.0)
        x, y = (
            self._parsed(f"{place}.{axis}", item, Quantity.LENGTH)
            for axis, item in zip("xy", raw, strict=True)
        )
        return (x, y)

    def _inner(self, place: str, raw: object) -> Table:
        if not isinstance(raw, dict):
            self.faults.append(Fault(place, f"{shown(raw)}; a table is needed", self.file))
            # what is missing in a table that is none is no news: those faults go nowhere
            return Table({}, place=place, file=self.file, faults=[])
        return Table(raw, place=place, file=self.file, faults=self.faults)


def is_array(raw: object) -> TypeGuard[list[object]]:
    """Tell whether a TOML value is an array."""
    return isinstance(raw, list)


def is_like_number(raw: object) -> bool:
    """Tell whether a TOML value is a number, or a text that begins like one."""
    return is_number(raw) or (isinstance(raw, str) and raw[:1] in "+-.0123456789")


def open_table(path: Path) -> Table:
    """Return the whole of a TOML file as a table.

    Parameters
    ----------
    path : Path
        The file.

    Raises
    ------
    InputError
        If it cannot be read, or is no TOML.
    """
    text = read_text(path)
    try:
        raw: dict[str, object] = tomllib.loads(text)
    except RecursionError:
        raise InputError([Fault("", "tables or arrays are nested too deep", path)]) from None
    except ValueError as error:
        match = TOML_PLACE.fullmatch(str(error))
        message, place = (match[1], match[2]) if match else (str(error), "")
        raise InputError([Fault(place, f"{message}; the file is no valid TOML", path)]) from None
    return Table(raw, place="", file=path, faults=[])
