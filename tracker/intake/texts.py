"""Columns of text: each distinct text is looked at once, and rows are told by its number.

Files run in an order: a column repeats a text, or goes on as it did after the same text before. So
the next text is guessed and compared, and looked up only where the guess fails.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numba import njit
from numpy.typing import NDArray

#: Distinct texts remembered; a column that has more begins anew, so that memory does not grow.
MOST_TEXTS = 1_000_000

#: Share of a batch that may be guessed wrong before the rest of it is looked up as a whole.
MOST_WRONG = 0.1


@dataclass(frozen=True, slots=True)
class Texts:
    """A column of a batch of rows."""

    distinct: list[str | None]
    """Texts by number, trimmed, None for a blank; the same list for all batches until it is full, and
    longer than this batch needs."""

    place: NDArray[np.int32]  #: number of the text of each row


class KnownTexts:
    """The texts of a column, known from batch to batch.

    Examples
    --------
    >>> known = KnownTexts()
    >>> known.of(pa.array(["a", " b ", None, "a"])).place.tolist()
    [0, 1, 2, 0]
    >>> texts = known.of(pa.array(["b", "c"]))
    >>> texts.distinct, texts.place.tolist()
    (['a', 'b', None, 'b', 'c'], [3, 4])
    """

    def __init__(self) -> None:
        self._forget()

    def _forget(self) -> None:
        self._distinct: list[str | None] = []
        self._number: dict[bytes, int] = {}
        self._bytes = np.empty(4_096, dtype=np.uint8)
        self._ends = np.zeros(257, dtype=np.int64)  # of the text before the first, and of each
        self._next = np.empty(256, dtype=np.int32)  # what came after each text last time
        self._last = -1

    def of(self, column: pa.Array) -> Texts:
        """Return the texts of the next batch."""
        if len(self._distinct) > MOST_TEXTS:
            self._forget()
        _, offsets, data = column.cast(pa.string()).buffers()
        first = column.offset
        ends = np.frombuffer(offsets, dtype=np.int32)[first : first + len(column) + 1]
        signs = np.frombuffer(data or b"\0", dtype=np.uint8)
        place = np.empty(len(column), dtype=np.int32)
        row, n_wrong = 0, 0
        while True:
            row, self._last = _guessed(
                signs, ends, row, self._bytes, self._ends, self._next, self._last, place
            )
            if row == len(column):
                break
            if n_wrong > MOST_WRONG * len(column):
                place[row:] = self._looked_up(column.slice(row))
                break
            n_wrong += 1
            number = self._number_of(signs[ends[row] : ends[row + 1]].tobytes())
            if self._last >= 0:
                self._next[self._last] = number
            place[row] = self._last = number
            row += 1
        return Texts(self._distinct, place)

    def _looked_up(self, column: pa.Array) -> NDArray[np.int32]:
        """Return the numbers of texts that follow no order."""
        encoded = column.dictionary_encode()
        numbers = [self._number_of(text.encode()) for text in encoded.dictionary.to_pylist()]
        blank = self._number_of(b"") if encoded.null_count else -1
        places = pc.fill_null(encoded.indices, len(numbers)).to_numpy(zero_copy_only=False)
        found: NDArray[np.int32] = np.array([*numbers, blank], dtype=np.int32)[places]
        self._last = int(found[-1])
        return found

    def _number_of(self, raw: bytes) -> int:
        number = self._number.get(raw)
        if number is None:
            number = self._number[raw] = len(self._distinct)
            self._remember(number, raw)
            self._distinct.append(raw.decode(errors="replace").strip() or None)
        return number

    def _remember(self, number: int, raw: bytes) -> None:
        start = int(self._ends[number])
        stop = start + len(raw)
        if number == len(self._next):
            self._ends = np.concatenate([self._ends, np.zeros(number, dtype=np.int64)])
            self._next = np.concatenate([self._next, np.empty_like(self._next)])
        if stop > len(self._bytes):
            more = np.empty(max(len(self._bytes), len(raw)), dtype=np.uint8)
            self._bytes = np.concatenate([self._bytes, more])
        self._bytes[start:stop] = np.frombuffer(raw, dtype=np.uint8)
        self._ends[number + 1] = stop
        self._next[number] = number


@njit(cache=True, nogil=True)
def _guessed(signs, ends, row, known, known_ends, following, last, place):  # type: ignore[no-untyped-def]
    """Number rows as long as the guess holds; return the first where it does not, and the last number.

    The guess is the text before, and what came after that text the last time.
    """
    while row < len(place):
        start, length = ends[row], ends[row + 1] - ends[row]
        found = np.int64(-1)
        if last >= 0:
            for attempt in range(2):
                guess = last if attempt else np.int64(following[last])
                begin = known_ends[guess]
                if known_ends[guess + 1] - begin != length:
                    continue
                same = 0
                while same < length and signs[start + same] == known[begin + same]:
                    same += 1
                if same == length:
                    found = guess
                    break
        if found < 0:
            break
        if found != following[last]:
            following[last] = found
        place[row] = last = found
        row += 1
    return row, last
