"""How does a plan become one static picture, for documents?

The same plan always makes the same bytes. matplotlib draws; it comes with profileplan[report].
"""

from __future__ import annotations

import io
from pathlib import Path
from typing import TYPE_CHECKING

from profileplan.errors import Fault, InputError
from profileplan.report.extra import missing
from profileplan.setpoints.files import replacing_all

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from profileplan.results import PlannedCycle

FORMS: dict[str, dict[str, str | None]] = {
    ".png": {"Software": None},
    ".svg": {"Date": None, "Creator": "profileplan"},
    ".pdf": {"CreationDate": None, "Producer": None, "Creator": "profileplan"},
}
"""Endings of pictures, and what each says of its making: nothing that changes."""

DOTS = 200
"""Of a .png, in an inch."""


def draw(planned: PlannedCycle) -> Figure:
    """Return views and curves of a plan as a figure of A4.

    Parameters
    ----------
    planned : PlannedCycle

    Raises
    ------
    InputError
        matplotlib is not installed.

    Examples
    --------
    ::

        figure = plan("cycle.toml").plot()
        figure.savefig("picture.pdf")
    """
    judge()
    from profileplan.report.picture_sheet import laid_out  # noqa: PLC0415
    from profileplan.report.picture_style import style  # noqa: PLC0415

    with style():
        return laid_out(planned)


def write_picture(planned: PlannedCycle, file: Path | str) -> None:
    """Write views and curves of a plan as one picture; replaced when complete.

    Parameters
    ----------
    planned : PlannedCycle
    file : Path or str
        Ending with .png, .svg or .pdf.

    Raises
    ------
    InputError
        It has another ending or cannot be written, or matplotlib is not installed.
    """
    file = Path(file)
    judge(file)
    from profileplan.report.picture_style import style  # noqa: PLC0415

    form = file.suffix.lower()
    stream = io.BytesIO()
    figure = draw(planned)
    with style():
        figure.savefig(stream, format=form[1:], dpi=DOTS, metadata=FORMS[form])
    with replacing_all() as files:
        output = files.open(file)
        files.write(output, stream.getvalue())
        files.close(output)


def judge(file: Path | None = None) -> None:
    """Tell at once whether a picture can be drawn, and written to a file.

    Raises
    ------
    InputError
        As for ``write_picture``; whether there is room is not known before.
    """
    if file is not None and file.suffix.lower() not in FORMS:
        message = f"the ending is {file.suffix!r}; a picture is .png, .svg or .pdf"
        raise InputError([Fault("", message, file)])
    if absent := missing("matplotlib"):
        raise InputError([Fault("", f"a picture needs more: {absent}", file)])
