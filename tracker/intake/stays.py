"""Who is at which site from when to when: deciding what a register row means for what is held."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from zoneinfo import ZoneInfo

from tracker.intake.stamps import day_start
from tracker.store.fleet import Span, Stay

NEW = 0  #: key of a stay that the store does not hold yet


@dataclass(slots=True)
class StayBook:
    """The stays of units, or of meters: those held, and those a file brings."""

    held: dict[int, list[Stay]] = field(default_factory=dict)  #: by who
    added: list[Stay] = field(default_factory=list)
    removed: list[Stay] = field(default_factory=list)
    _at_site: dict[int, list[Stay]] = field(default_factory=dict)
    _of_file: dict[int, list[Stay]] = field(default_factory=dict)

    @classmethod
    def of(cls, stays: Iterable[Stay]) -> StayBook:
        """Open a book with what the store holds."""
        book = cls()
        for stay in stays:
            book.held.setdefault(stay.who, []).append(stay)
            book._at_site.setdefault(stay.site_key, []).append(stay)
        return book

    def neighbour(self, stay: Stay) -> Stay | None:
        """Return the stay of another at the same site at the same time."""
        for other in self._at_site.get(stay.site_key, ()):
            if other.who != stay.who and other.span.overlaps(stay.span):
                return other
        return None

    def clash(self, stay: Stay) -> Stay | None:
        """Return a stay elsewhere at the same time, of the same who, that this one cannot replace.

        A row replaces a held stay that begins on the same day, or overlaps at the same site; rows of
        one file never replace each other.
        """
        for other in self._of_file.get(stay.who, ()):
            if other.span.overlaps(stay.span) and other != stay:
                return other
        for other in self.held.get(stay.who, ()):
            if other.span.overlaps(stay.span) and not _replaces(stay, other):
                return other
        return None

    def put(self, stay: Stay) -> str:
        """Note a stay; return its fate: taken, unchanged or corrected."""
        own = self.held.setdefault(stay.who, [])
        former = [other for other in own if _replaces(stay, other)]
        self._of_file.setdefault(stay.who, []).append(stay)
        if len(former) == 1 and _same(former[0], stay):
            return "unchanged"
        for other in former:
            own.remove(other)
            self._at_site[other.site_key].remove(other)
            if other.key == NEW:
                self.added.remove(other)
            else:
                self.removed.append(other)
        own.append(stay)
        self._at_site.setdefault(stay.site_key, []).append(stay)
        self.added.append(stay)
        return "corrected" if former else "taken"


def _replaces(stay: Stay, other: Stay) -> bool:
    same_start = stay.span.starts_at == other.span.starts_at
    return same_start or (stay.site_key == other.site_key and stay.span.overlaps(other.span))


def _same(one: Stay, other: Stay) -> bool:
    return replace(one, key=NEW) == replace(other, key=NEW)


class Numbers:
    """Numbers for names: the store's keys, and negative ones for what it does not hold yet."""

    def __init__(self, held: Mapping[str, int]) -> None:
        self._number = dict(held)
        self._name = {number: name for name, number in held.items()}
        self._n_new = 0

    def of(self, name: str) -> int:
        """Return the number of a name."""
        if name not in self._number:
            self._n_new += 1
            self._number[name] = -self._n_new
            self._name[-self._n_new] = name
        return self._number[name]

    def name(self, number: int) -> str:
        """Return the name of a number."""
        return self._name[number]

    def keys(self, held: Mapping[str, int]) -> dict[int, int]:
        """Return the key of every number, once all is written: `held` are the store's keys then."""
        return {number: held[name] for name, number in self._number.items() if name in held}


def span_of(
    starts_on: str | None, ends_on: str | None, zone: ZoneInfo | None
) -> tuple[Span, str | None]:
    """Return the span between two dates, and what is wrong with it, if anything is."""
    span = Span(_moment(starts_on, zone), _moment(ends_on, zone))
    if span.starts_at and span.ends_at and span.starts_at >= span.ends_at:
        return span, f"ends on {ends_on}, which is not after its start on {starts_on}"
    return span, None


def _moment(date: str | None, zone: ZoneInfo | None) -> dt.datetime | None:
    start = None if date is None else day_start(date, zone)
    return None if start is None else start.astimezone(dt.UTC)
