"""Many keys in one query."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sqlalchemy import Column, Integer, MetaData, Table, create_engine, insert, select

from tracker.store.keys import among

NUMBERS = Table("numbers", MetaData(), Column("n", Integer, primary_key=True))


@pytest.fixture(scope="module")
def connection():
    """A table of the numbers from 0 to 29."""
    engine = create_engine("sqlite://")
    with engine.connect() as connection:
        NUMBERS.metadata.create_all(connection)
        connection.execute(insert(NUMBERS), [{"n": n} for n in range(30)])
        yield connection
    engine.dispose()


@given(keys=st.lists(st.integers(0, 29), max_size=12))
def test_the_keys_named_and_no_others(connection, keys) -> None:
    """In any order, with any doubles: 1, 5, 3 are not all from 1 to 3."""
    found = connection.scalars(select(NUMBERS.c.n).where(among(NUMBERS.c.n, keys)))
    assert sorted(found) == sorted(set(keys))


def test_keys_out_of_order(connection) -> None:
    """The one that was missed."""
    assert set(connection.scalars(select(NUMBERS.c.n).where(among(NUMBERS.c.n, [1, 5, 3])))) == {
        1,
        3,
        5,
    }
