"""Columns of text that are told by number: guessed along the order of a file, looked up elsewhere."""

from __future__ import annotations

import random

import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tracker.intake import texts as module
from tracker.intake.texts import KnownTexts

WORDS = st.one_of(
    st.none(), st.sampled_from(["", " ", "a", "b", " a", "ab", "é", "x" * 50]), st.text()
)


def told(known: KnownTexts, batch: list[str | None]) -> list[str | None]:
    texts = known.of(pa.array(batch, type=pa.string()))
    return [texts.distinct[place] for place in texts.place.tolist()]


def meant(batch: list[str | None]) -> list[str | None]:
    return [(text or "").strip() or None for text in batch]


@settings(deadline=None)  # the first example compiles
@given(batches=st.lists(st.lists(WORDS, max_size=40), max_size=6))
def test_any_texts_are_told_as_they_stand(batches) -> None:
    """Property: whatever is guessed, the number is that of the row's own text, trimmed."""
    known = KnownTexts()
    for batch in batches:
        assert told(known, batch) == meant(batch)


@pytest.mark.parametrize("order", ["by meter", "by hour", "shuffled"])
def test_files_in_their_usual_orders(order) -> None:
    """Meters one after the other, hours one after the other, or neither; batches cut anywhere."""
    rows = [(f"M-{m:03d}", f"2025-07-01T{h:02d}:00Z") for m in range(400) for h in range(24)]
    if order == "by hour":
        rows.sort(key=lambda row: row[1])
    elif order == "shuffled":
        random.Random(5).shuffle(rows)
    for column in (0, 1):
        known = KnownTexts()
        values = [row[column] for row in rows]
        for start in range(0, len(values), 701):
            assert told(known, values[start : start + 701]) == values[start : start + 701]
        assert len(known.of(pa.array(["x"])).distinct) == (401 if column == 0 else 25)


def test_memory_does_not_grow_with_a_column_that_never_repeats(monkeypatch) -> None:
    """A column that has too many texts begins anew; batches given before keep theirs."""
    monkeypatch.setattr(module, "MOST_TEXTS", 100)
    known = KnownTexts()
    first = known.of(pa.array([str(n) for n in range(150)]))
    second = known.of(pa.array(["149", "x"]))
    assert len(first.distinct) == 150
    assert [second.distinct[place] for place in second.place.tolist()] == ["149", "x"]
    assert len(second.distinct) == 2


def test_a_slice_of_a_column() -> None:
    """Arrow hands over parts of columns without copying them."""
    column = pa.array(["a", "b", None, "c", "a", "b"]).slice(1, 4)
    texts = KnownTexts().of(column)
    assert [texts.distinct[place] for place in texts.place.tolist()] == ["b", None, "c", "a"]
