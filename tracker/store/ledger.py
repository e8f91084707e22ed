"""The intake ledger: every file, its fates, every refusal."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping, Sequence
from typing import Any

from sqlalchemy import Connection, insert, update

from tracker.store.models import IntakeFile, IntakeRefusal


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


def close_entry(
    connection: Connection,
    file_key: int,
    *,
    fingerprint: str,
    taken: int,
    unchanged: int,
    corrected: int,
    refusals: Sequence[Mapping[str, Any]],
) -> None:
    """Write down what became of a file.

    `fingerprint` is a checksum of its content; `refusals` are mappings of line, column, code, reason, text.
    """
    connection.execute(
        update(IntakeFile)
        .where(IntakeFile.id == file_key)
        .values(
            fingerprint=fingerprint,
            readings=taken + unchanged + corrected + len(refusals),
            taken=taken,
            unchanged=unchanged,
            corrected=corrected,
            refused=len(refusals),
        )
    )
    if refusals:
        connection.execute(
            insert(IntakeRefusal), [{"file_key": file_key, **refusal} for refusal in refusals]
        )
