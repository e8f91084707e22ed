"""Readings as the parser gives them, gathered into chunks that are merged at a time."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

#: Readings merged at a time: bounds the memory whatever the file.
READINGS_A_CHUNK = 4_000_000


@dataclass(frozen=True, slots=True)
class Part:
    """Readings in the order of the file; arrays of shape (n_reading,)."""

    series: NDArray[np.int32]  #: place in the file's list of series
    first_s: NDArray[np.int64]  #: stamp [s since 1970, UTC]
    second_s: NDArray[
        np.int64
    ]  #: the later moment of a repeated local hour; `first_s` itself if none
    values: NDArray[np.float64]  #: shape (n_rule, n_reading); NaN where blank
    flags: NDArray[np.uint8]
    ordinal: NDArray[np.int64]  #: of the row in the file

    def __len__(self) -> int:
        return len(self.series)

    @property
    def told_apart(self) -> bool:
        """Whether no stamp means two moments."""
        return self.second_s is self.first_s

    def where(self, mask: NDArray[np.bool_]) -> Part:
        """Return the readings under the mask."""
        if mask.all():
            return self
        first_s = self.first_s[mask]
        return Part(
            self.series[mask],
            first_s,
            first_s if self.told_apart else self.second_s[mask],
            self.values[:, mask],
            self.flags[mask],
            self.ordinal[mask],
        )

    def between(self, start: int, stop: int) -> Part:
        """Return a stretch of the readings."""
        first_s = self.first_s[start:stop]
        return Part(
            self.series[start:stop],
            first_s,
            first_s if self.told_apart else self.second_s[start:stop],
            self.values[:, start:stop],
            self.flags[start:stop],
            self.ordinal[start:stop],
        )


class Chunk:
    """Room for one chunk, used again and again: fresh memory costs more than the copy."""

    def __init__(self, n_rule: int) -> None:
        size = READINGS_A_CHUNK
        first_s = np.empty(size, dtype=np.int64)
        self._room = Part(
            np.empty(size, dtype=np.int32),
            first_s,
            np.empty(size, dtype=np.int64),
            np.empty((n_rule, size), dtype=np.float64),
            np.empty(size, dtype=np.uint8),
            np.empty(size, dtype=np.int64),
        )
        self._n = 0
        self._told_apart = True

    def filled_by(self, part: Part) -> Iterator[Part]:
        """Add readings; yield the chunk each time it is full, to be used before the next is asked for."""
        start = 0
        while start < len(part):
            stop = min(len(part), start + READINGS_A_CHUNK - self._n)
            self._put(part.between(start, stop))
            start = stop
            if self._n == READINGS_A_CHUNK:
                yield from self.rest()

    def rest(self) -> Iterator[Part]:
        """Yield what was added since the last full chunk, if anything was."""
        if self._n:
            held = self._room.between(0, self._n)
            if self._told_apart:
                held = Part(
                    held.series, held.first_s, held.first_s, held.values, held.flags, held.ordinal
                )
            yield held
        self._n, self._told_apart = 0, True

    def _put(self, part: Part) -> None:
        room = self._room.between(self._n, self._n + len(part))
        room.series[:] = part.series
        room.first_s[:] = part.first_s
        room.values[:] = part.values
        room.flags[:] = part.flags
        room.ordinal[:] = part.ordinal
        if not part.told_apart and self._told_apart:
            self._told_apart = False
            self._room.second_s[: self._n] = self._room.first_s[: self._n]
        if not self._told_apart:
            room.second_s[:] = part.second_s
        self._n += len(part)
