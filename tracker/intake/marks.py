"""What the rules of validation find in the readings of a store, listed on demand."""

from __future__ import annotations

import datetime as dt
from collections.abc import Collection, Iterator
from dataclasses import dataclass

import numpy as np
from sqlalchemy import Connection

from tracker.intake.member_load import MemberLoads, member_loads
from tracker.intake.site_load import batches, by_step, members_in
from tracker.intake.validation import RULES
from tracker.store import fleet
from tracker.store import members as on_sites
from tracker.store.blocks import month_start_s


@dataclass(frozen=True, slots=True)
class Mark:
    """Readings one after the other that a rule found, at one site and in one month."""

    site_id: str
    name: str  #: of the meter, or of the unit that was measured as a whole
    rule: str
    starts_at: dt.datetime
    ends_at: dt.datetime  #: excluded
    highest_kva: float  #: the largest of them, multiplier included
    set_aside: bool  #: counts as a gap; the value of others is kept


def reading_marks(
    connection: Connection,
    *,
    site_ids: Collection[str] | None = None,
    names: Collection[str] | None = None,
    rules: Collection[str] | None = None,
) -> Iterator[Mark]:
    """Yield what the rules in force find in readings that count for a site, by site.

    Parameters
    ----------
    site_ids, names, rules : collection of str, optional
        Sites, meters (or measured units) and rules to look at; all unless said.
    """
    ids = {site["id"]: site["site_id"] for site in fleet.sites(connection)}
    sites = [key for key, site_id in ids.items() if site_ids is None or site_id in site_ids]
    for batch in batches(connection, on_sites.months_of_sites(connection, sites)):
        for month, own in batch.sites_of_month.items():
            for step_min, places in by_step(batch, month, own).items():
                members, _ = members_in(batch.facts, places, month)
                chosen = [names is None or row.name in names for row in members.rows]
                members = members.take(np.flatnonzero(chosen))
                loads = member_loads(members, month, step_min, batch.held, batch.facts)
                yield from _listed(loads, ids, rules)


def _listed(
    loads: MemberLoads, ids: dict[int, str], rules: Collection[str] | None
) -> Iterator[Mark]:
    if loads.marks is None:
        return
    start_s, step_s = month_start_s(loads.month), 60 * loads.step_min
    for row in np.flatnonzero(loads.marks.any(axis=1)).tolist():
        member = loads.members.rows[row]
        first, last = loads.places[row].tolist()
        size = np.hypot(loads.kw[row], loads.kvar[row]) + loads.kva[row]
        for rule in RULES:
            if rules is not None and rule.name not in rules:
                continue
            found = (loads.marks[row, first:last] & rule.bit) != 0
            edges = np.flatnonzero(np.diff(found, prepend=False, append=False)) + first
            for start, stop in edges.reshape(-1, 2).tolist():
                yield Mark(
                    ids[member.site_key],
                    member.name,
                    rule.name,
                    dt.datetime.fromtimestamp(start_s + step_s * start, dt.UTC),
                    dt.datetime.fromtimestamp(start_s + step_s * stop, dt.UTC),
                    float(member.multiplier * size[start:stop].max()),
                    rule.sets_aside,
                )
