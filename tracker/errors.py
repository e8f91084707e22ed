"""Every exception the package raises on purpose.

* TrackerError
  + InputError           the person can fix it: a bad option, file or value (exit status 2)
    - IntakeError        a file cannot be read as what it claims to be
    - ModelRangeError    a value lies outside the range a formula is valid for
  + StoreError           the database refused, is damaged, or is at another revision (exit status 2)

Messages say what value, where, what is allowed and what to do next, in one line.
"""

from __future__ import annotations


class TrackerError(Exception):
    """Base of all errors meant for a person; anything else is a bug."""


class InputError(TrackerError):
    """A wrong option, file or value."""


class IntakeError(InputError):
    """A file that cannot be taken in at all; single bad rows are refused instead."""


class ModelRangeError(InputError, ValueError):
    """A value outside the range of validity of a formula."""


class StoreError(TrackerError):
    """The store cannot be opened or used as it is."""
