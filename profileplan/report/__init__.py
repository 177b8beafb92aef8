"""A plan as a page and as pictures that a person can look at, hand over and sign.

Names are loaded from their modules when they are first used: they bring large libraries with them.
"""

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from profileplan.report.notebook import brief
    from profileplan.report.page import write_page
    from profileplan.report.pictures import draw, write_picture

__all__ = ["brief", "draw", "write_page", "write_picture"]

_HOMES = {
    "brief": "notebook",
    "draw": "pictures",
    "write_page": "page",
    "write_picture": "pictures",
}


def __getattr__(name: str) -> object:
    """Load a name from the module that it lives in (PEP 562)."""
    if name not in _HOMES:
        message = f"module {__name__!r} has no attribute {name!r}"
        raise AttributeError(message)
    from importlib import import_module  # noqa: PLC0415

    return getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)
