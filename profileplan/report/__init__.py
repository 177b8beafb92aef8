"""A plan as a page and as pictures that a person can look at, hand over and sign.

Names are loaded from their modules when they are first used: they bring large libraries with them.
"""

from typing import TYPE_CHECKING

from profileplan.lazy import loader

if TYPE_CHECKING:
    from profileplan.report.notebook import brief
    from profileplan.report.page import write_page
    from profileplan.report.pictures import draw, write_picture

__all__ = ["brief", "draw", "write_page", "write_picture"]

_HOMES = {"notebook": ("brief",), "page": ("write_page",), "pictures": ("draw", "write_picture")}

__getattr__ = loader(__name__, _HOMES)
