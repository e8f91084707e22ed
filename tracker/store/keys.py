"""Many keys in one query."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any, TypeVar

from sqlalchemy import ColumnElement

Key = TypeVar("Key")

#: Keys named in one query; SQLite allows 32,766 parameters.
KEYS_A_QUERY = 10_000


def in_parts(keys: Sequence[Key], size: int = KEYS_A_QUERY) -> Iterator[Sequence[Key]]:
    """Cut a list of keys into lists that one query can name."""
    for start in range(0, len(keys), size):
        yield keys[start : start + size]


def among(column: Any, keys: Sequence[int]) -> ColumnElement[bool]:
    """Return the condition that a column is one of some keys, in any order.

    Keys that are neighbours all, as most are, need not be named one by one.
    """
    condition: ColumnElement[bool]
    if keys and max(keys) - min(keys) + 1 == len(set(keys)):
        condition = column.between(min(keys), max(keys))
    else:
        condition = column.in_(keys)
    return condition
