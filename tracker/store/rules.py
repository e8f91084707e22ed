"""The rules of validation and filling that a store works by."""

from __future__ import annotations

from dataclasses import asdict

from sqlalchemy import Connection, delete, insert, select

from tracker.settings import ReadingRules, checked_rules
from tracker.store.models import ReadingRule


def reading_rules(connection: Connection) -> ReadingRules:
    """Return the rules in force: the defaults, and what was set otherwise."""
    rows = connection.execute(select(ReadingRule.name, ReadingRule.value))
    return checked_rules({row.name: row.value for row in rows})


def keep_reading_rules(connection: Connection, rules: ReadingRules) -> None:
    """Put rules in force; only what differs from the defaults is written down."""
    defaults = asdict(ReadingRules())
    set_otherwise = [
        {"name": name, "value": float(value)}
        for name, value in asdict(rules).items()
        if value != defaults[name]
    ]
    connection.execute(delete(ReadingRule))
    if set_otherwise:
        connection.execute(insert(ReadingRule), set_otherwise)
