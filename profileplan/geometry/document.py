"""What DXF document stands in a file, in which unit is it drawn, and what had to be repaired?

Source: the unit codes of $INSUNITS and $MEASUREMENT are those of the DXF reference (from memory); a
survey foot is 1200/3937 m (U.S. National Bureau of Standards, 1959, from memory).
"""

from __future__ import annotations

import io
import struct
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from ezdxf import recover
from ezdxf.filemanagement import readfile
from ezdxf.lldxf.const import DXFError
from ezdxf.sections.headervars import HEADER_VAR_MAP

from profileplan.errors import Fault, InputError
from profileplan.inputs.rules import near, quoted, shown

if TYPE_CHECKING:
    from pathlib import Path

    from ezdxf.audit import Auditor
    from ezdxf.document import Drawing as Document
    from ezdxf.layouts.layout import Layout

HEAD = 4096
"""Bytes at the beginning of a file that tell what it is."""

BINARY = b"AutoCAD Binary DXF"
"""How binary DXF files begin."""

MOST_NAMED = 20
"""How many names or repairs a message lists."""

SURVEY_FOOT = 1_200_000 / 3937

UNIT_CODES = {
    1: ("inch", 25.4),
    2: ("ft", 304.8),
    3: ("mile", 1_609_344.0),
    4: ("mm", 1.0),
    5: ("cm", 10.0),
    6: ("m", 1e3),
    7: ("km", 1e6),
    8: ("microinch", 25.4e-6),
    9: ("mil", 0.0254),
    10: ("yard", 914.4),
    11: ("angstrom", 1e-7),
    12: ("nm", 1e-6),
    13: ("µm", 1e-3),
    14: ("dm", 100.0),
    15: ("dam", 1e4),
    16: ("hm", 1e5),
    17: ("Gm", 1e12),
    18: ("astronomical unit", 149_597_870_700e3),
    19: ("light year", 9_460_730_472_580_800e3),
    20: ("parsec", 3.0856775814913673e19),
    21: ("survey foot", SURVEY_FOOT),
    22: ("survey inch", SURVEY_FOOT / 12),
    23: ("survey yard", SURVEY_FOOT * 3),
    24: ("survey mile", SURVEY_FOOT * 5280),
}
"""Name and length [mm] of the units of $INSUNITS."""

UNIT_NAMES = {
    **dict(UNIT_CODES.values()),
    "in": 25.4,
    "inches": 25.4,
    "um": 1e-3,
    "yd": 914.4,
    "mi": 1_609_344.0,
}

SHORT_NAMES = {"in": "inch", "inches": "inch", "um": "µm", "yd": "yard", "mi": "mile"}

MEASUREMENTS = {0: "inch", 1: "mm"}
"""What $MEASUREMENT says."""

PARSE_ERRORS = (
    DXFError,
    ArithmeticError,
    AssertionError,
    AttributeError,
    EOFError,
    LookupError,
    RuntimeError,
    StopIteration,
    TypeError,
    ValueError,
    struct.error,
)
"""What ezdxf raises for files that are damaged in ways it does not look for."""


class Opened(NamedTuple):
    """A document, and sentences about what was repaired."""

    document: Document
    notes: tuple[str, ...]


class Unit(NamedTuple):
    """A drawing's unit: its name, how many mm it is, who says so, and what to tell of it."""

    name: str
    scale: float
    source: str
    notes: tuple[str, ...]


def open_document(path: Path) -> Opened:
    """Return the document that stands in a DXF file, repaired where it must be.

    Raises
    ------
    InputError
        If there is no such file, or nothing in it that can be read as a DXF file.
    """
    head = _head(path)
    other = _other_kind(head)
    if other:
        raise InputError([Fault("", other, path)])
    try:
        return Opened(readfile(str(path)), ())
    except OSError:
        reason = "it does not begin with a section"
    except PARSE_ERRORS as error:
        reason = _first_line(error)
    try:
        document, auditor = recover.read(io.BytesIO(_completed(path)))
    except (OSError, *PARSE_ERRORS) as error:
        message = f"cannot be read as a DXF file, not even in part: {_first_line(error)}"
        raise InputError([Fault("", message, path)]) from None
    return Opened(document, (_repairs(auditor, reason),))


def _completed(path: Path) -> bytes:
    """Return what stands in a file; of one that was cut off, all entities but the last.

    Half an entity would be one with default values.
    """
    data = np.fromfile(path, dtype=np.uint8).tobytes()
    if data.startswith(BINARY) or b"EOF" in data[-HEAD:]:
        return data
    lines = data.splitlines()
    codes = [number for number in range(0, len(lines) - 1, 2) if lines[number].strip() == b"0"]
    whole = lines[: codes[-1]] if codes else lines
    return b"\n".join([*whole, b"0", b"ENDSEC", b"0", b"EOF", b""])


def _head(path: Path) -> bytes:
    """Return how a file begins."""
    if path.is_dir():
        raise InputError([Fault("", "is a directory; a DXF file is needed", path)])
    if path.exists() and not path.is_file():
        raise InputError([Fault("", "is no regular file; a DXF file is needed", path)])
    try:
        return np.fromfile(path, dtype=np.uint8, count=HEAD).tobytes()
    except FileNotFoundError:
        message = "no such file"
    except PermissionError:
        message = "cannot be read: permission denied"
    except OSError as error:
        message = f"cannot be read: {error.strerror or error}"
    except ValueError as error:
        message = f"cannot be read: {error}"
    raise InputError([Fault("", message, path)])


def _other_kind(head: bytes) -> str:
    """Return what a file is that is no DXF file, by how it begins, or nothing."""
    if not head.strip():
        return "is empty; a DXF file is needed"
    if head.startswith(b"AC10"):
        return "is a DWG file; save the drawing as DXF"
    if head.startswith(b"PK\x03\x04"):
        return "is a ZIP archive; unpack the DXF file in it"
    if not head.startswith(BINARY) and b"SECTION" not in head:
        return "is not a DXF file: no section begins in it"
    return ""


def _first_line(error: BaseException) -> str:
    """Return the first line of a message, or what kind of error it is."""
    lines = str(error).strip().splitlines()
    return lines[0] if lines else type(error).__name__


def _repairs(auditor: Auditor, reason: str) -> str:
    """Return what was found in a damaged file."""
    found = [entry.message for entry in (*auditor.errors, *auditor.fixes)]
    listed = "; ".join(text.rstrip(".") for text in found[:MOST_NAMED])
    more = f"; and {len(found) - MOST_NAMED} more" if len(found) > MOST_NAMED else ""
    repaired = f" What was found: {listed}{more}." if found else ""
    return (
        f"The file is damaged ({reason.rstrip('.')}) and was read as far as possible; "
        f"something may be missing.{repaired}"
    )


def unit_fault(name: str) -> str:
    """Return what is wrong with the name of a unit, or nothing."""
    if name in UNIT_NAMES:
        return ""
    choices = ", ".join(dict.fromkeys(SHORT_NAMES.get(unit, unit) for unit in UNIT_NAMES))
    return f"{shown(name)} is no unit of length; choose from {choices}{near(name, UNIT_NAMES)}"


def unit_of(document: Document, given: str | None) -> Unit:
    """Return the unit of a document: as given, as it says, or else mm.

    Parameters
    ----------
    document : Drawing of ezdxf
    given : str or None
        A name of `UNIT_NAMES`.
    """
    if given is not None:
        return Unit(SHORT_NAMES.get(given, given), UNIT_NAMES[given], "given", ())
    header = document.header
    # Without a header section ezdxf holds all variables with its own defaults.
    stated = len(header.hdrvars) < len(HEADER_VAR_MAP) or document.dxfversion != "AC1009"
    code = header.get("$INSUNITS", 0) if stated else 0
    if code in UNIT_CODES:
        return Unit(*UNIT_CODES[code], "drawing", ())
    unstated = (
        "The drawing does not say its unit ($INSUNITS"
        f"{' is 0' if code == 0 and '$INSUNITS' in header and stated else ''}"
        f"{f' is {code}' if code else ''})"
    ).replace("($INSUNITS)", "(no $INSUNITS)")
    measurement = MEASUREMENTS.get(header.get("$MEASUREMENT", -1) if stated else -1)
    if measurement is not None:
        kind = "metric" if measurement == "mm" else "imperial"
        note = f"{unstated}; $MEASUREMENT says {kind}, so lengths are taken as {measurement}."
        return Unit(measurement, UNIT_NAMES[measurement], "measurement", (note,))
    return Unit("mm", 1.0, "none", (f"{unstated}; lengths are taken as mm.",))


def layout_of(document: Document, space: str) -> Layout | str:
    """Return the model space, or a layout by its name, or what is wrong with the name."""
    if space.casefold() == "model":
        try:
            return document.modelspace()
        except LookupError:
            return "the drawing has no model space"
    names = {name.casefold(): name for name in document.layout_names()}
    if space.casefold() in names:
        return document.layout(names[space.casefold()])
    known = ["model", *(name for name in names.values() if name.casefold() != "model")]
    return f"there is no layout {shown(space)}; the drawing has {listed(known)}{near(space, known)}"


def listed(names: list[str]) -> str:
    """List names in quotes, not more than a message can hold."""
    more = f" and {len(names) - MOST_NAMED} more" if len(names) > MOST_NAMED else ""
    return quoted(names[:MOST_NAMED]) + more
