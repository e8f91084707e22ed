"""Setting the rules of validation and filling."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict

from sqlalchemy import Connection

from tracker.intake.site_load import Derived, derive_all
from tracker.settings import ReadingRules, checked_rules
from tracker.store.rules import keep_reading_rules, reading_rules


def set_rules(connection: Connection, values: Mapping[str, float | None]) -> Derived:
    """Change rules of validation and filling, and derive all loads anew where any changed.

    Parameters
    ----------
    values : mapping
        New value by name of the rule, a field of `ReadingRules`; None sets the default again.

    Raises
    ------
    InputError
        If a rule is not known, or its value out of range.
    """
    former = reading_rules(connection)
    defaults = asdict(ReadingRules())
    said = {
        name: defaults.get(name, 0.0) if value is None else value for name, value in values.items()
    }
    rules = checked_rules({**asdict(former), **said})
    if rules == former:
        return Derived()
    keep_reading_rules(connection, rules)
    return derive_all(connection)
