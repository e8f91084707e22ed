"""Keeping Python's cycle collector from walking the whole program while bulk work runs."""

from __future__ import annotations

import gc
from collections.abc import Iterator
from contextlib import contextmanager

#: Objects until a collection of the young, young collections until one of the middle-aged, and those
#: until one of all. Bulk work makes many objects and hardly a cycle, and beside the libraries that
#: are imported, going through all of them takes longer than much of the work.
SELDOM = (100_000, 20, 100)


@contextmanager
def seldom_collected() -> Iterator[None]:
    """Let the collector run seldom for a while."""
    usual = gc.get_threshold()
    gc.set_threshold(*SELDOM)
    try:
        yield
    finally:
        gc.set_threshold(*usual)
