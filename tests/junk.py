"""Values of any shape, for files that no one would write on purpose."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

from hypothesis import strategies as st

if TYPE_CHECKING:
    from hypothesis.strategies import SearchStrategy


def junk(words: SearchStrategy[str]) -> SearchStrategy[object]:
    """Return a strategy of nested TOML values whose keys and texts are drawn from words."""
    scalars = st.booleans() | st.integers(-(2**70), 2**70) | st.floats(allow_nan=True) | words
    return st.recursive(
        scalars,
        lambda inner: st.lists(inner, max_size=4) | st.dictionaries(words, inner, max_size=4),
        max_leaves=15,
    )


def toml(value: object) -> str:
    """Write a value as TOML, all in one line."""
    match value:
        case bool():
            return str(value).lower()
        case int() | float():
            return repr(value)
        case str():
            return json.dumps(value, ensure_ascii=False)
        case list():
            return "[" + ", ".join(toml(item) for item in value) + "]"
        case dict():
            pairs = (f"{toml(key)} = {toml(item)}" for key, item in value.items())
            return "{" + ", ".join(pairs) + "}"
    raise TypeError(value)
