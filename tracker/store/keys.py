"""Many keys in one query."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TypeVar

Key = TypeVar("Key")

#: Keys named in one query; SQLite allows 32,766 parameters.
KEYS_A_QUERY = 10_000


def in_parts(keys: Sequence[Key], size: int = KEYS_A_QUERY) -> Iterator[Sequence[Key]]:
    """Cut a list of keys into lists that one query can name."""
    for start in range(0, len(keys), size):
        yield keys[start : start + size]
