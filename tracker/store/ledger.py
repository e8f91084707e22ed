"""The intake ledger: every file, its fates, every refusal, every reading replaced."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from sqlalchemy import Connection, func, insert, select, update

from tracker.store.blocks import month_start_s, step_of, unpack
from tracker.store.models import IntakeFile, IntakeRefusal, ReadingBlock, Series, SupersededBlock


def open_entry(connection: Connection, *, kind: str, name: str, options: Mapping[str, Any]) -> int:
    """Begin a file's entry and return its key."""
    inserted = connection.execute(
        insert(IntakeFile).values(
            kind=kind,
            name=name,
            fingerprint="",
            imported_at=dt.datetime.now(dt.UTC),
            options=dict(options),
            readings=0,
            taken=0,
            unchanged=0,
            corrected=0,
            refused=0,
        )
    ).inserted_primary_key
    assert inserted is not None
    return int(inserted[0])


def add_refusals(
    connection: Connection, file_key: int, refusals: Sequence[Mapping[str, Any]]
) -> None:
    """Write down refused rows: mappings of line, column, code, reason, text."""
    if refusals:
        connection.execute(
            insert(IntakeRefusal), [{"file_key": file_key, **refusal} for refusal in refusals]
        )


def close_entry(
    connection: Connection,
    file_key: int,
    *,
    fingerprint: str,
    taken: int,
    unchanged: int,
    corrected: int,
    refused: int,
    facts: Mapping[str, Any],
) -> None:
    """Write down what became of a file; `fingerprint` is a checksum of its content."""
    connection.execute(
        update(IntakeFile)
        .where(IntakeFile.id == file_key)
        .values(
            fingerprint=fingerprint,
            readings=taken + unchanged + corrected + refused,
            taken=taken,
            unchanged=unchanged,
            corrected=corrected,
            refused=refused,
            facts=dict(facts),
        )
    )


def add_facts(connection: Connection, file_key: int, facts: Mapping[str, Any]) -> None:
    """Add to what is written down of a file."""
    held = connection.scalar(select(IntakeFile.facts).where(IntakeFile.id == file_key)) or {}
    connection.execute(
        update(IntakeFile).where(IntakeFile.id == file_key).values(facts={**held, **facts})
    )


# --- Reading it -----------------------------------------------------------------------------------


def entries(connection: Connection, name: str | None = None) -> list[dict[str, Any]]:
    """Return the files taken in, newest first: all, or those of a name or of a path that ends in it."""
    query = select(IntakeFile.__table__).order_by(IntakeFile.id.desc())
    rows = [dict(row._mapping) for row in connection.execute(query)]
    if name is None:
        return rows
    exact = [row for row in rows if row["name"] == name]
    return exact or [row for row in rows if row["name"].replace("\\", "/").split("/")[-1] == name]


def refusals(
    connection: Connection, file_key: int, limit: int | None = None
) -> Iterator[dict[str, Any]]:
    """Yield the refused rows of a file, in its order."""
    columns = [
        getattr(IntakeRefusal, name) for name in ("line", "column", "code", "reason", "text")
    ]
    query = (
        select(*columns).where(IntakeRefusal.file_key == file_key).order_by(IntakeRefusal.id)
    ).limit(limit)
    for row in connection.execute(query.execution_options(yield_per=10_000)):
        yield dict(row._mapping)


def refusals_by_code(connection: Connection, file_key: int) -> dict[str, int]:
    """Return how many rows of a file were refused for each reason."""
    query = (
        select(IntakeRefusal.code, func.count())
        .where(IntakeRefusal.file_key == file_key)
        .group_by(IntakeRefusal.code)
        .order_by(func.count().desc(), IntakeRefusal.code)
    )
    return dict(connection.execute(query).all())


@dataclass(frozen=True, slots=True)
class Replaced:
    """A reading that a file replaced."""

    kind: str  #: of the series: meter, unit or station
    name: str
    quantity: str
    interval_start: dt.datetime
    former: float
    now: float | None  #: what is held today, which a later file may have replaced again


def replaced(connection: Connection, file_key: int) -> Iterator[Replaced]:
    """Yield the readings that a file replaced, by series and time."""
    query = (
        select(
            Series.kind,
            Series.name,
            SupersededBlock.quantity,
            SupersededBlock.month,
            SupersededBlock.payload,
            ReadingBlock.payload.label("held"),
        )
        .join_from(SupersededBlock, Series, SupersededBlock.series_key == Series.id)
        .outerjoin(
            ReadingBlock,
            (ReadingBlock.series_key == SupersededBlock.series_key)
            & (ReadingBlock.quantity == SupersededBlock.quantity)
            & (ReadingBlock.month == SupersededBlock.month),
        )
        .where(SupersededBlock.replaced_by == file_key)
        .order_by(Series.kind, Series.name, SupersededBlock.quantity, SupersededBlock.month)
    )
    for row in connection.execute(query.execution_options(yield_per=100)):
        yield from _replaced_in(row)


def _replaced_in(row: Any) -> Iterator[Replaced]:
    values, flags = unpack([row.payload])
    step_min = step_of(row.payload)
    for place in np.flatnonzero(flags[0]).tolist():
        start_s = month_start_s(row.month) + 60 * step_min * place
        yield Replaced(
            row.kind,
            row.name,
            row.quantity,
            dt.datetime.fromtimestamp(start_s, dt.UTC),
            float(values[0, place]),
            _value_at(row.held, step_min * place),
        )


def _value_at(payload: bytes | None, minute: int) -> float | None:
    """Return the value a block holds at a minute of its month."""
    if payload is None:
        return None
    values, flags = unpack([payload])
    place = minute // step_of(payload)
    return float(values[0, place]) if flags[0, place] else None
