"""Working ahead: the next items are made in a thread while the present one is used."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import TypeVar

T = TypeVar("T")


def ahead(items: Iterable[T], depth: int) -> Iterator[T]:
    """Yield items in order, up to `depth` of them made in advance.

    What making an item raises is raised here, in its place. When the user of the items stops early,
    making them stops after those under way.

    Examples
    --------
    >>> list(ahead((n * n for n in range(4)), depth=2))
    [0, 1, 4, 9]
    """
    source = iter(items)
    waiting: deque[Future[T | None]] = deque()
    with ThreadPoolExecutor(1) as maker:  # one thread, so that items are made in order
        try:
            while True:
                while len(waiting) < depth:
                    waiting.append(maker.submit(next, source, None))
                item = waiting.popleft().result()
                if item is None:
                    return
                yield item
        finally:
            for future in waiting:
                future.cancel()
