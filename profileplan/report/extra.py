"""Are the libraries there that draw, and how are they got?"""

from __future__ import annotations

from importlib.util import find_spec

HOW_TO_GET = "pip install 'profileplan[report]'"


def missing(*libraries: str) -> str:
    """Return which of some libraries are not there, and how to get them; nothing if all are."""
    absent = [name for name in libraries if find_spec(name) is None]
    return f"{' and '.join(absent)} not found: {HOW_TO_GET}" if absent else ""
