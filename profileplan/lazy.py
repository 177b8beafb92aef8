"""How are names of a package loaded when they are first used (PEP 562)?"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence


def loader(package: str, homes: Mapping[str, Sequence[str]]) -> Callable[[str], object]:
    """Return what a package has as its ``__getattr__``.

    Parameters
    ----------
    package : str
        Its name.
    homes : mapping
        Module of the package → names that live in it.
    """
    home_of = {name: home for home, names in homes.items() for name in names}

    def load(name: str) -> object:
        if name not in home_of:
            message = f"module {package!r} has no attribute {name!r}"
            raise AttributeError(message)
        return getattr(import_module(f"{package}.{home_of[name]}"), name)

    return load
